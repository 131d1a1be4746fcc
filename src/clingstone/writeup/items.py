"""What a methods text has to answer, item by item, and the sentences that answer."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

ITEMS: Mapping[str, str] = {
    "M1": "design: what was sampled, what was assigned, at which level, and why",
    "M2": "unit of analysis, exact numbers of units and of rows",
    "M3": "units at every level, their sizes, spacing in time, extent in space",
    "M4": "rows left out, and why",
    "M5": "the model, and at which level each variable varies",
    "M6": "how dependence was taken into account",
    "M7": "estimator, covariance, kernel or neighbours, with units",
    "M8": "degrees of freedom: the rule, the value, the reference distribution",
    "M9": "intraclass correlation or its like, with uncertainty",
    "M10": "variances, correlations or ranges of the dependence, with intervals",
    "M11": "how the dependence model was chosen, and what was tried",
    "M12": "how the assumptions were checked, and the outcome",
    "M13": "estimates with intervals",
    "M14": "influence and effective number of groups",
    "M15": "sensitivity: other refits, levels and rules",
    "M16": "unit of assignment against unit of analysis",
    "M17": "software, versions, seed",
    "M18": "to which groups, places and times the result is meant to apply",
}

# Where published guidelines ask for the same, by their own numbers. Sources: GUIDELINES.
NUMBERED: Mapping[str, str] = {
    "M1": "CONSORT for cluster trials 2a, 3a; LEVEL 2, 4",
    "M2": "ARRIVE 1b, 2a, 3c",
    "M3": "CONSORT for cluster trials 13a; LEVEL 5a, 5b",
    "M4": "STROBE 12c, 13; ARRIVE 3b; LEVEL 5c",
    "M5": "LEVEL 3, 6a, 6b",
    "M6": "CONSORT for cluster trials 12a; STROBE 12d",
    "M7": "LEVEL 8",
    "M8": "",
    "M9": "CONSORT for cluster trials 7a, 17a; LEVEL 7",
    "M10": "",
    "M11": "LEVEL 8",
    "M12": "ARRIVE 7b",
    "M13": "STROBE 16a; CONSORT for cluster trials 17a",
    "M14": "",
    "M15": "STROBE 12e, 17",
    "M16": "CONSORT for cluster trials 12a",
    "M17": "ARRIVE 7a",
    "M18": "CONSORT for cluster trials 21",
}
GUIDELINES: Mapping[str, str] = {
    "CONSORT for cluster trials": "campbell-2012",
    "LEVEL": "monsalves-2020",
    "ARRIVE": "percie-du-sert-2020",
    "STROBE": "von-elm-2007",
}


@dataclass(frozen=True)
class Sentence:
    """Plain text, and the keys of the items that it answers. ``blank``: for a person to fill in."""

    text: str
    items: tuple[str, ...]
    blank: bool = False


@dataclass(frozen=True)
class Section:
    title: str
    sentences: tuple[Sentence, ...]
