"""Cautions about counts: what few groups, short series and few or far-reaching places allow."""

from __future__ import annotations

from clingstone.advice.expressions import fact
from clingstone.advice.rule import GROUP, SERIAL, SPATIAL, Rule, Then

COUNTS = (
    Rule(
        "few-groups-caveat",
        GROUP & (fact("groups") < 10),
        Then("caveat"),
        "{groups} groups are few; the interval rests on a small-sample approximation.",
        "cameron-miller-2015",
        "convention",
    ),
    Rule(
        "few-effective-clusters",
        GROUP & fact("focus at group level") & (fact("effective clusters") < 10) & (fact("groups") >= 10),
        Then("caveat"),
        "The {groups} groups carry the focus term so unequally that they count as {effective clusters} for "
        "it.",
        "carter-schnepel-steigerwald-2017",
        "strong",
    ),
    Rule(
        "few-treated-groups",
        GROUP
        & fact("focus at group level")
        & (fact("groups in the smaller arm") >= 3)
        & (fact("groups in the smaller arm") < 6),
        Then("caveat"),
        "Only {groups in the smaller arm} groups carry {term of the smaller arm}; the interval leans on "
        "equal variances in both arms.",
        "mackinnon-webb-2017",
        "strong",
    ),
    Rule(
        "low-df",
        fact("lowest df of the advised refit") < 4,
        Then("caveat"),
        "The advised interval has only {lowest df of the advised refit} degrees of freedom: read it as a "
        "rough range.",
        "tipton-2015, pustejovsky-tipton-2018",
        "convention",
    ),
    Rule(
        "few-outer-groups",
        GROUP & (fact("groups") >= 10) & (fact("fewest groups to cover") < 10),
        Then("caveat"),
        "Of {level with the fewest groups} there are only {fewest groups to cover} groups: what varies "
        "between them is known roughly.",
        "cameron-miller-2015",
        "convention",
    ),
    Rule(
        "one-group-dominates",
        GROUP & (fact("largest share of one group") >= 0.25) & (fact("groups") >= 8),
        Then("caution"),
        "One group holds {largest share of one group} of the information on {term of the largest share}.",
        "mackinnon-nielsen-webb-2023",
        "convention",
    ),
    Rule(
        "short-series",
        SERIAL
        & ~GROUP
        & fact("advised refit models the order in time")
        & (fact("rows in the longest series") < 50)
        & (fact("series") < 20),
        Then("caveat"),
        "With {rows in the longest series} rows the correlation is estimated too low, and the interval is "
        "corrected only in part.",
        "park-mitchell-1980, mcknight-2000",
        "strong",
    ),
    Rule(
        "few-sites",
        SPATIAL & fact("spatial estimable") & (fact("sites") < 50),
        Then("caveat"),
        "With {sites} sites the range of the dependence is known only roughly.",
        "webster-oliver-2007",
        "convention",
    ),
    Rule(
        "few-places-as-groups",
        SPATIAL & ~fact("spatial estimable") & fact("rows of one place alone"),
        Then("caveat"),
        "{sites} places are few, and they are taken as independent of each other: the interval rests on a "
        "small-sample approximation, and what fades with distance is not allowed for.",
        "cameron-miller-2015, webster-oliver-2007",
        "moderate",
    ),
    Rule(
        "long-range",
        SPATIAL & (fact("range over extent") >= 0.25) & (fact("range over extent") < 0.5),
        Then("caveat"),
        "The dependence reaches over {range over extent} of the map's width: few places are independent of "
        "one another, so its range is only roughly known.",
        "muller-watson-2022, webster-oliver-2007",
        "moderate",
    ),
    Rule(
        "wide-range-rough",
        SPATIAL & (fact("range over extent") >= 0.5) & (fact("range over extent") < 1),
        Then("caveat"),
        "The dependence reaches over {range over extent} of the map's width: the map holds only a handful of "
        "places that are nearly independent, and the interval is rough.",
        "muller-watson-2022, bester-conley-hansen-2011",
        "moderate",
    ),
    Rule(
        "not-sized",
        fact("declared but not sized"),
        Then("caution"),
        "These data are too few to say how strongly {names not sized} hang together; a silent test says "
        "little there.",
        "park-mitchell-1980, webster-oliver-2007",
        "strong",
    ),
    Rule(
        "few-treated-redrawn",
        GROUP & fact("focus at group level") & (fact("groups in the smaller arm") < 3),
        Then("caveat"),
        "Only {groups in the smaller arm} groups carry {term of the smaller arm}: the interval leans on the "
        "assignment having been by lot, and on groups of much the same size.",
        "mackinnon-webb-2018",
        "strong",
    ),
    Rule(
        "crossed-few-groups",
        GROUP & (fact("crossed levels to cover") >= 2) & (fact("groups of the smallest crossed level") < 25),
        Then("caveat"),
        "{crossed levels} cross, and the smallest has {groups of the smallest crossed level} groups: an "
        "interval that covers both ways at once is rough.",
        "cameron-gelbach-miller-2011",
        "convention",
    ),
    Rule(
        "randomisation-beside",
        GROUP
        & fact("assigned or sampled by group")
        & ((fact("groups") < 12) | (fact("groups in the smaller arm") <= 5))
        & fact("randomisation stands beside"),
        Then("caution"),
        "The level was assigned and its groups are few: the randomisation test, which stands beside, rests "
        "on the assignment alone.",
        "rosenbaum-2002, mackinnon-webb-2018",
        "strong",
    ),
)
