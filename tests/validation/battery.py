"""The battery: every world of the simulation study, by name."""

from __future__ import annotations

from typing import Any

from tests.validation import worlds as w

GROUP: dict[str, Any] = {"model": "y ~ x", "group": "g"}
TIME: dict[str, Any] = {"model": "y ~ x", "time": "t"}
PANEL: dict[str, Any] = {"model": "y ~ x", "group": "g", "time": "t"}
PLACE: dict[str, Any] = {"model": "y ~ x", "coords": ("east", "north"), "lonlat": False}
G, S, P = frozenset({"group"}), frozenset({"serial"}), frozenset({"spatial"})
W = w.World
SOME, FEW = 20, 10  # columns of y on one design where each takes longer


def _independent() -> list[w.World]:
    return [
        W("independent, 12 groups of 5, x in rows", w.groups(12, 5, 0.0, "row"), GROUP),
        W("independent, 12 groups of 5, x of groups", w.groups(12, 5, 0.0, "group"), GROUP),
        W("independent, 40 groups of 4, x of groups", w.groups(40, 4, 0.0, "group"), GROUP),
        W("independent, 40 times, x a trend", w.series(40, 0.0, "trend"), TIME, batch=SOME),
        W("independent, 100 times, x a trend", w.series(100, 0.0, "trend"), TIME, batch=SOME),
        W("independent, 100 times, x autoregressive", w.series(100, 0.0, "ar"), TIME, batch=SOME),
        W("independent, 60 places, x rough", w.places(60, 20, 0.0, "rough"), PLACE, batch=FEW),
        W("independent, 60 places, x smooth", w.places(60, 20, 0.0, "smooth"), PLACE, batch=FEW),
        W("independent, 12 series of 6, x in rows", w.panel(12, 6, 0.0, 0.0, "row"), PANEL, batch=SOME),
    ]


def _groups() -> list[w.World]:
    out = []
    for number, m in ((6, 8), (12, 6), (40, 4)):
        for icc in (0.05, 0.2):
            for equal in (True, False):
                for level in ("row", "group"):
                    how = "equal" if equal else "unequal"
                    where = "in rows" if level == "row" else "of groups"
                    name = f"ICC {icc}, {number} {how} groups, x {where}"
                    out.append(W(name, w.groups(number, m, icc, level, equal), GROUP, G))
    out += [
        W("slopes differ (sd 0.4), 12 groups of 6", w.groups(12, 6, 0.2, "row", slope=0.4), GROUP, G),
        W("slopes differ (sd 0.4), 40 groups of 5", w.groups(40, 5, 0.2, "row", slope=0.4), GROUP, G),
        W("treatment in 2 of 20 groups, ICC 0.2", w.treated(20, 5, 2, 0.2), GROUP, G),
        W("treatment in 4 of 20 groups, ICC 0.2", w.treated(20, 5, 4, 0.2), GROUP, G),
        W("spread differs by group, x in rows", w.uneven(12, 6, "row"), GROUP),
        W("spread differs by group, x of groups", w.uneven(12, 6, "group"), GROUP),
        W("one outlying row", w.outlier(12, 5), GROUP),
    ]
    nest = {"model": "y ~ x", "group": "a/b"}
    cross = {"model": "y ~ x", "group": ("a", "b")}
    out += [
        W("nested 8 × 3 × 4, x of a", w.nested(8, 3, 4, 0.1, 0.15, "a"), nest, G, batch=FEW),
        W("nested 8 × 3 × 4, x of b", w.nested(8, 3, 4, 0.1, 0.15, "b"), nest, G, batch=FEW),
        W("nested 8 × 3 × 4, x in rows", w.nested(8, 3, 4, 0.1, 0.15, "row"), nest, G, batch=FEW),
        W("crossed 10 × 8, x of a", w.crossed(10, 8, 0.2, 0.2, "a"), cross, G, batch=FEW),
        W("crossed 10 × 8, x in rows", w.crossed(10, 8, 0.2, 0.2, "row"), cross, G, batch=FEW),
    ]
    return out


def _times() -> list[w.World]:
    out = []
    for rho in (0.3, 0.7):
        for n in (40, 100, 300):
            for how, words in (("trend", "x a trend"), ("ar", "x autoregressive")):
                out.append(W(f"ρ {rho}, {n} times, {words}", w.series(n, rho, how), TIME, S, batch=SOME))
    out += [
        W("ρ 0.6 in 30 series of 5, x in rows", w.panel(30, 5, 0.0, 0.6, "row"), PANEL, S, batch=SOME),
        W("ρ 0.6 in 30 series of 5, x of groups", w.panel(30, 5, 0.0, 0.6, "group"), PANEL, S, batch=SOME),
        W(
            "ICC 0.3 and ρ 0.5, 15 × 8, x autoregressive",
            w.panel(15, 8, 0.3, 0.5, "ar"),
            PANEL,
            G | S,
            batch=SOME,
        ),
        W(
            "ICC 0.3 and ρ 0.5, 15 × 8, x of groups",
            w.panel(15, 8, 0.3, 0.5, "group"),
            PANEL,
            G | S,
            batch=SOME,
        ),
        W(
            "ICC 0.3 and ρ 0.5, 6 × 12, x of groups",
            w.panel(6, 12, 0.3, 0.5, "group"),
            PANEL,
            G | S,
            batch=SOME,
        ),
    ]
    return out


def _places() -> list[w.World]:
    out = []
    for reach, far in ((20.0, "short range"), (60.0, "long range")):
        out += [
            W(f"field 70 %, {far}, 80 places, x {how}", w.places(80, reach, 0.7, how), PLACE, P, batch=FEW)
            for how in ("rough", "smooth")
        ]
    out += [
        W("field 50 %, 25 places × 4 rows, x rough", w.places(25, 30, 0.5, "rough", 4), PLACE, P, batch=FEW),
        W(
            "field 50 %, 25 places × 4 rows, x smooth",
            w.places(25, 30, 0.5, "smooth", 4),
            PLACE,
            P,
            batch=FEW,
        ),
    ]
    return out


def _means() -> list[w.World]:
    return [
        W("missed curve in x, 12 groups", w.missed(12, 6, "x"), GROUP, covered=False, wrong=True),
        W(
            "missed curve in z along time",
            w.missed(12, 6, "z"),
            {**TIME, "model": "y ~ x + z"},
            wrong=True,
            batch=SOME,
        ),
        W("missed trend, 72 times, x rough", w.missed(12, 6, "trend"), TIME, wrong=True, batch=SOME),
        W(
            "missed curve in z that x follows, 12 groups",
            w.missed(12, 6, "z", follows=True),
            {**GROUP, "model": "y ~ x + z"},
            covered=False,
            wrong=True,
        ),
    ]


def _decoys() -> list[w.World]:
    """One structure is real; another is declared, and its own test sees the first one's shadow."""
    return [
        W(
            "ICC 0.3 alone, order declared too, 15 × 8, x of groups",
            w.panel(15, 8, 0.3, 0.0, "group"),
            PANEL,
            G,
            batch=SOME,
        ),
        W(
            "ρ 0.5 alone, groups declared too, 15 × 8, x of groups",
            w.panel(15, 8, 0.0, 0.5, "group"),
            PANEL,
            S,
            batch=SOME,
        ),
    ]


def _wrong_models() -> list[w.World]:
    """Truths that none of the fitted error models holds."""
    return [
        W("spread grows with x, 100 rows in 20 groups", w.fanned(100), GROUP),
        W("group effects go with x, 20 groups of 6", w.endogenous(20, 6, 0.8), GROUP, G),
        W(
            "slow process under noise, 100 times, x a trend",
            w.noisy(100, 0.9, 0.5, "trend"),
            TIME,
            S,
            batch=SOME,
        ),
        W(
            "slow process under noise, 100 times, x autoregressive",
            w.noisy(100, 0.9, 0.5, "ar"),
            TIME,
            S,
            batch=SOME,
        ),
        W(
            "slow process under noise, 300 times, x a trend",
            w.noisy(300, 0.9, 0.5, "trend"),
            TIME,
            S,
            batch=SOME,
        ),
        W("errors repeat after 12 times, 120 times, x repeats", w.seasonal(120, 12), TIME, S, batch=SOME),
    ]


FAMILIES: dict[str, list[w.World]] = {
    "Independent rows": _independent(),
    "Groups": _groups(),
    "Order in time": _times(),
    "Places": _places(),
    "A part of the mean is missing": _means(),
    "One structure real, another only declared": _decoys(),
    "None of the fitted models is true": _wrong_models(),
}
WORLDS: tuple[w.World, ...] = tuple(world for worlds in FAMILIES.values() for world in worlds)
