"""What the tests for groups share: levels, their names, what they need, what warns of them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.design.design import Design, Term, rows_of
from clingstone.evidence.finding import About
from clingstone.evidence.read import Plain
from clingstone.maths.once import Array, once
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported
from clingstone.structure.group import title_of

if TYPE_CHECKING:
    from clingstone.covariance.fits import Fits

BY = " by "  # "day by patient": a predictor at a level


def level_name(key: str) -> str:
    """What a sentence calls a level: "ward within clinic" for "clinic/ward"."""
    return title_of(key)


def levels(design: Design) -> tuple[About, ...]:
    """One place for each group level."""
    if design.group is None:
        return ()
    groups = design.group
    return tuple(About(level.key, f"rows of one {groups.title(level.key)}") for level in groups.levels)


def repeats(design: Design, about: About) -> Partition:
    """The level of a place. Raises NotSupported where its groups hold no repeats."""
    assert design.group is not None
    part = design.group[about.key]
    name = design.group.title(about.key)
    if part.count < 2:
        raise NotSupported(f"there is only one {name}", "At least 2 are needed, some with several rows.")
    if part.sizes.max() < 2:
        raise NotSupported(
            f"every {name} has a single row, so likeness within a {name} cannot be seen",
            f"Several rows of at least one {name} would be needed.",
        )
    return part


def caveats(design: Design, part: Partition) -> tuple[str, ...]:
    out = []
    if part.count < 5:
        out.append(f"There are only {part.count} groups, so the correlation is known very roughly.")
    if not design.known:
        out.append("Only residuals were given, so the degrees of freedom leave out the columns of the model.")
    return tuple(out)


class AtLevels(Plain):
    """A test at each group level."""

    def abouts(self, design: Design) -> tuple[About, ...]:
        return levels(design)


class BesideOthers(AtLevels):
    """A test at each group level, also given all else that the data can carry at once."""

    def givens(self, fits: Fits, about: About) -> tuple[frozenset[str], ...]:
        key, full = f"group:{about.key}", fits.full_node
        return (full - {key},) if key in full and len(full) > 1 else ()


# ---- predictors at a level -----------------------------------------------------------------------------


@once
def moving(design: Design, part: Partition, term: Term) -> tuple[int, ...]:
    """Columns of a term that vary within some group of a level."""
    X = rows_of(design, design.Q @ design.basis.R[:, list(term.columns)])
    inside = X - part.means(X)[part.codes]
    scale = np.abs(X).max(axis=0) + 1e-300
    varies = np.any(np.abs(inside) > 1e-9 * scale, axis=0)
    return tuple(j for j, yes in zip(term.columns, varies, strict=True) if yes)


@once
def row_level(design: Design) -> tuple[tuple[Partition, Term], ...]:
    """Terms in focus that vary within the groups of a level, finest level first."""
    if design.group is None:
        return ()
    return tuple(
        (level, term)
        for level in reversed(design.group.levels)
        for term in design.focus()
        if level.count > 1 and moving(design, level, term)
    )


def found(design: Design, about: About) -> tuple[Partition, Term]:
    """Level and term of "term by level"."""
    return next((v, t) for v, t in row_level(design) if f"{t.name}{BY}{v.key}" == about.key)


@once
def covariate(design: Design, term: Term) -> Array | None:
    """(n,) the raw predictor of a numeric term that enters the model as it is; None for any other."""
    if term.kind != "numeric" or len(term.columns) != 1 or len(term.variables) != 1:
        return None
    values = design.covariates.get(term.variables[0])
    if values is None:
        return None
    x = np.asarray(values, dtype=float)
    column = rows_of(design, design.Q @ design.basis.R[:, term.columns[0]])
    return x if np.all(np.abs(column - x) <= 1e-9 * np.abs(x).max()) else None
