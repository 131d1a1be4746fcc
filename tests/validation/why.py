"""Why a world falls short of an aim: (aim, part of its name, why); the first that fits is shown."""

from __future__ import annotations

SIX = "six groups leave 4 degrees of freedom: the t quantile alone is 1.42 times the oracle's normal one"
TWELVE = (
    "twelve groups leave 10 degrees of freedom: the t quantile alone is 1.14 times the oracle's normal one"
)
KNOWN = "the oracle weighs rows by their true spread, which no fit can know"
TREND = "a correlation that is not seen would matter along a trend, so the interval allows for it"
SLOW = (
    "a slow process under row noise passes for a faster one, and one series is short for a long-run variance"
)

REASONS: tuple[tuple[str, str, str], ...] = (
    ("width", "6 equal groups, x of groups", SIX),
    ("width", "6 unequal groups, x of groups", SIX),
    ("width", "12 groups of 5, x of groups", TWELVE),
    ("width", "12 equal groups, x of groups", TWELVE),
    ("width", "12 unequal groups, x of groups", TWELVE),
    (
        "width",
        "8 × 3 × 4, x of a",
        "8 groups leave 6 degrees of freedom: t alone is 1.25 times the oracle's quantile",
    ),
    (
        "width",
        "10 × 8, x of a",
        "10 groups leave 8 degrees of freedom: t alone is 1.18 times the oracle's quantile",
    ),
    ("width", "spread differs", KNOWN),
    ("width", "outlying row", "the oracle knows the spread of the other rows"),
    ("width", "x a trend", TREND),
    (
        "coverage",
        "group effects go with x",
        "0.5 is the coefficient within groups; the one that was asked for mixes it with that between them",
    ),
    ("coverage", "slow process under noise", SLOW),
    (
        "coverage",
        "errors repeat after 12",
        "the correlation sits at the twelfth lag, where a first-order model does not look",
    ),
)
