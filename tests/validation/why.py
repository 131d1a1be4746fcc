"""Why a world falls short of an aim: (aim, part of its name, why); the first that fits is shown."""

from __future__ import annotations

SIX = "six groups leave 4 degrees of freedom: the t quantile alone is 1.42 times the oracle's normal one"
TWELVE = (
    "twelve groups leave 10 degrees of freedom: the t quantile alone is 1.14 times the oracle's normal one"
)
KNOWN = "the oracle weighs rows by their true spread, which no fit can know"
TREND = "a correlation that is not seen would matter along a trend, so the interval allows for it"
FANNED = (
    "the oracle weighs rows by their true spread: the ordinary coefficient itself is 1.4 times as uncertain"
)
WEAK = (
    "the ordinary coefficient, which the advised refit keeps, is itself {} times as uncertain as the oracle's"
)
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
    ("width", "spread grows with x", FANNED),
    ("width", "30 series of 5, x in rows", WEAK.format("1.36")),
    (
        "width",
        "slow process under noise, 100 times, x autoregressive",
        WEAK.format("1.39") + "; the few degrees of freedom of a long-run variance do the rest",
    ),
    (
        "width",
        "missed curve in z",
        "the oracle knows the curve, and without it the ordinary interval is 1.46 times as wide; over 72 "
        "times a curve in z, which runs as time does, is not told from a process: the model stays as it is",
    ),
    (
        "width",
        "group effects go with x",
        "the pooled coefficient mixes two, and its effects of groups count as error, which the oracle knows",
    ),
    (
        "width",
        "10 × 8, x in rows",
        WEAK.format("1.19") + "; at most 9 degrees of freedom of clusters do the rest",
    ),
    (
        "width",
        "8 × 3 × 4, x in rows",
        WEAK.format("1.13") + "; at most 7 degrees of freedom of clusters (t: 1.21 times the normal) do more",
    ),
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
