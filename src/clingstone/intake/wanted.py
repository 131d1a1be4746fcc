"""What a user wants of a model: focus, named contrasts, means of factors."""

from __future__ import annotations

import itertools
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from clingstone.display import instead
from clingstone.intake.formula import TIMES, known_term, same_term, unknown
from clingstone.intake.model import Blocks, TermBlock
from clingstone.needs import InputError


@dataclass(frozen=True)
class Combination:
    """A named linear combination of coefficients, weights (p,)."""

    name: str
    weights: tuple[float, ...]
    kind: Literal["contrast", "mean"]
    of: str = ""


def contrasts(found: Blocks, wanted: Mapping[str, Mapping[str, float]] | None) -> tuple[Combination, ...]:
    """Rows of ``{name: {coefficient: weight}}``. InputError for an unknown coefficient."""
    out = []
    for name, parts in (wanted or {}).items():
        weights = np.zeros(len(found.names))
        for coefficient, weight in parts.items():
            weights[_coefficient(found, coefficient, f"the contrast ‘{name}’")] += float(weight)
        if not np.any(weights) or not np.all(np.isfinite(weights)):
            raise InputError(
                f"the contrast ‘{name}’ has no finite weight other than 0",
                "Write contrasts={'name': {'arm: high': 1, 'arm: low': -1}}.",
            )
        if name in found.names:
            raise InputError(f"the contrast ‘{name}’ has the name of a coefficient", "Give it another name.")
        out.append(Combination(name, tuple(float(w) for w in weights), "contrast"))
    return tuple(out)


def means(found: Blocks, wanted: Sequence[str] | None) -> tuple[Combination, ...]:
    """Mean response at each level of a factor, or each cell of several ("arm:visit").

    Every row is set to the level, all else left as it is, and the columns of the model are
    averaged over the rows (marginal standardisation with the data as they are; Lane & Nelder 1982).
    """
    out = []
    for spec in wanted or ():
        parts = known_term(spec).split(TIMES)
        for part in parts:
            if part not in found.levels:
                factors = list(found.levels)
                hint = instead(part, factors) if factors else "A factor is a column of text, or C(column)."
                raise InputError(f"means= names ‘{part}’, which is no factor of the model", hint)
        if found.remake is None:
            raise InputError(
                f"means of ‘{spec}’ need a model that can be evaluated anew, and only its columns are known",
                "Give the data and the formula with model=.",
            )
        for cell in itertools.product(*(found.levels[p] for p in parts)):
            label = TIMES.join(f"{p}: {_word(v)}" for p, v in zip(parts, cell, strict=True))
            row = found.remake(dict(zip(parts, cell, strict=True))).mean(axis=0)
            out.append(
                Combination(f"mean of {label}", tuple(float(w) for w in row), "mean", known_term(spec))
            )
    return tuple(out)


def focus(
    found: Blocks, wanted: Sequence[str] | None, combinations: Sequence[Combination] = ()
) -> frozenset[str]:
    """Names of the terms whose intervals matter.

    A name is a term, else a factor or column (all terms that use it), else a coefficient (its
    term), else a contrast or a factor of ``means`` (all terms that it weighs). Default: all terms
    but the constant, and the constant where there is no other.
    """
    if wanted is None:
        chosen = frozenset(t.name for t in found.terms if t.kind != "constant")
        return chosen or frozenset(t.name for t in found.terms)
    out: set[str] = set()
    for name in wanted:
        terms = _terms_of(found, name, combinations)
        if not terms:
            offered = [t.name for t in found.terms] + [c.name for c in combinations if c.kind == "contrast"]
            raise unknown("focus", name, [*offered, *(n for n in found.names if n not in offered)])
        out.update(t.name for t in terms)
    return frozenset(out)


def term(found: Blocks, name: str, what: str) -> TermBlock:
    """The term of that name, or the only main term that uses that column."""
    exact = [t for t in found.terms if same_term(t.name, name)]
    single = exact or [t for t in found.terms if t.variables == (name,)]
    if len(single) != 1:
        raise unknown(what, name, [t.name for t in found.terms if t.kind != "constant"])
    return single[0]


def _terms_of(found: Blocks, name: str, combinations: Sequence[Combination]) -> list[TermBlock]:
    exact = [t for t in found.terms if same_term(t.name, name)]
    if exact:
        return exact
    using = [t for t in found.terms if name in t.variables]
    if using:
        return using
    if name in found.names:
        place = found.names.index(name)
        return [t for t in found.terms if place in t.columns]
    rows = [np.array(c.weights) for c in combinations if c.name == name or c.of == known_term(name)]
    return [
        t for t in found.terms if t.kind != "constant" and any(np.any(w[list(t.columns)] != 0) for w in rows)
    ]


def _coefficient(found: Blocks, name: str, what: str) -> int:
    same = [j for j, n in enumerate(found.names) if n == name]
    if not same:
        parts = sorted(p.strip() for p in re.split(r"×|:(?!\s)", name))
        same = [j for j, n in enumerate(found.names) if sorted(n.split(TIMES)) == parts]
    if not same:
        raise InputError(
            f"{what} names ‘{name}’, which is no coefficient of the model",
            instead(name, found.names),
        )
    return same[0]


def _word(value: object) -> str:
    if isinstance(value, (float, np.floating)) and float(value).is_integer():
        return str(int(value))
    return str(value)
