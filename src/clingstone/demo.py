"""The demonstrations: eight data sets of an invented valley, and the question that each one asks."""

from __future__ import annotations

import difflib
import shlex
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from clingstone.needs import InputError


@dataclass(frozen=True)
class Demo:
    """A data set, the question asked of it, and the arguments of ``examine`` that ask it.

    options : the same arguments as they are written on the command line.
    """

    name: str
    question: str
    arguments: Mapping[str, Any]
    options: tuple[str, ...]

    @property
    def path(self) -> Path:
        return data_folder() / f"{self.name}.csv"

    @property
    def command(self) -> str:
        """As one would type it, a line for each option."""
        words = shlex.join(["clingstone", "examine", f"{self.name}.csv", *self.options])
        return words.replace(" --", " \\\n    --")


DEMOS: Mapping[str, Demo] = {
    "trial": Demo(
        "trial",
        "Twelve clinics of Halvendale were given, by lot, home visits or usual care. Do home visits lower "
        "blood pressure?",
        {
            "model": "pressure ~ arm + baseline + age",
            "group": "clinic",
            "assigned": {"arm": "clinic"},
            "focus": ("arm",),
        },
        (
            *("--model", "pressure ~ arm + baseline + age", "--group", "clinic"),
            *("--assigned", "arm=clinic", "--focus", "arm"),
        ),
    ),
    "lambs": Demo(
        "lambs",
        "Lambs of ten flocks were weighed at birth and every fortnight for ten weeks. How much lighter are "
        "twins, and how fast do lambs grow?",
        {
            "model": "weight ~ day + birth + sex",
            "group": "flock/lamb",
            "time": "day",
            "focus": ("birth", "day"),
        },
        (
            *("--model", "weight ~ day + birth + sex", "--group", "flock/lamb"),
            *("--time", "day", "--focus", "birth", "--focus", "day"),
        ),
    ),
    "stream": Demo(
        "stream",
        "Half-way through two years of daily readings, a strip of alders was planted along the Halve. Did "
        "the nitrate in its water fall?",
        {
            "model": "nitrate ~ strip + rain + year + winter + spring",
            "time": "date",
            "focus": ("strip",),
        },
        (
            *("--model", "nitrate ~ strip + rain + year + winter + spring"),
            *("--time", "date", "--focus", "strip"),
        ),
    ),
    "wells": Demo(
        "wells",
        "Sixty wells were sampled on four rounds. Does the salt spread on the valley road reach the wells "
        "near it?",
        {
            "model": "chloride ~ road_km + depth_m + wet",
            "group": "well",
            "coords": ("east_km", "north_km"),
            "focus": ("road_km",),
        },
        (
            *("--model", "chloride ~ road_km + depth_m + wet", "--group", "well"),
            *("--coords", "east_km", "north_km", "--focus", "road_km"),
        ),
    ),
    "transects": Demo(
        "transects",
        "Birds were counted on thirty-eight transects, each walked three to nine times. Are there fewer "
        "where sheep graze?",
        {
            "model": "log_birds ~ elevation + grazed + wind",
            "group": "transect",
            "focus": ("grazed",),
        },
        (
            *("--model", "log_birds ~ elevation + grazed + wind", "--group", "transect"),
            *("--focus", "grazed"),
        ),
    ),
    "visits": Demo(
        "visits",
        "Sixty patients came in weeks of their own choosing, and some stopped coming. Does pain fall faster "
        "under the new care?",
        {
            "model": "pain ~ start + week * care",
            "group": "patient",
            "time": "week",
            "focus": ("week:care",),
        },
        (
            *("--model", "pain ~ start + week * care", "--group", "patient"),
            *("--time", "week", "--focus", "week:care"),
        ),
    ),
    "plots": Demo(
        "plots",
        "Five varieties of barley were sown by lot in four blocks of one field. Which of them yields more "
        "than Amber?",
        {
            "model": "tonnes ~ variety + block",
            "coords": ("east_m", "north_m"),
            "focus": ("variety",),
        },
        (
            *("--model", "tonnes ~ variety + block"),
            *("--coords", "east_m", "north_m", "--focus", "variety"),
        ),
    ),
    "survey": Demo(
        "survey",
        "People of twenty-four lands were asked how far they trust strangers. Is trust higher where a land "
        "spends more?",
        {
            "model": "trust ~ spending + school + age",
            "group": "land",
            "focus": ("spending",),
        },
        (
            *("--model", "trust ~ spending + school + age", "--group", "land"),
            *("--focus", "spending"),
        ),
    ),
}


def find(name: str) -> Demo:
    """The demonstration of that name. Raises InputError with the near names."""
    if name in DEMOS:
        return DEMOS[name]
    near = difflib.get_close_matches(name, DEMOS, n=1)
    raise InputError(
        f"there is no demonstration {name!r}" + (f"; did you mean {near[0]!r}?" if near else ""),
        f"Choose one of {', '.join(DEMOS)}.",
    )


def data_folder() -> Path:
    """Where the data sets are: inside the installed package, or at the root of a checkout."""
    installed = Path(__file__).parent / "demo_data"
    return installed if installed.is_dir() else Path(__file__).parents[2] / "demo_data"
