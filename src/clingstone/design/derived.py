"""Designs made from a design: columns added, groups absorbed, rows collapsed to cells."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from clingstone.design.design import Contrast, Design, Term
from clingstone.design.parted import PartedDesign, PartedResponse
from clingstone.design.response import Response
from clingstone.maths.basis import Basis, aliased, lengths
from clingstone.maths.once import Array, frozen
from clingstone.maths.partition import Partition
from clingstone.needs import NotSupported


def extend(design: Design, name: str, columns: Array, variables: Sequence[str] = ()) -> Design:
    """The design with further columns (n, k), on the user's scale, as one more term.

    They are taken less what the constant and the terms in one of ``variables`` alone explain of them. Those
    coefficients so keep a meaning of their own: the constant is not that of one month, the slope of x beside
    a curve in x is that of the line through the curve. All others are adjusted for the columns.

    Columns that the design already spans are left out; NotSupported if none is left.
    """
    columns = np.asarray(columns, dtype=float)
    columns = columns[:, None] if columns.ndim == 1 else columns
    if design.root is not None:
        columns = columns * design.root[:, None]
    rest = design.basis.project(columns)
    size = lengths(columns)
    keep = np.flatnonzero(lengths(rest) > 1e-9 * np.where(size == 0, 1.0, size))
    if not len(keep):
        raise NotSupported(f"the model already spans {name}")
    try:
        new = Basis.of(rest[:, keep])
    except ValueError:  # some columns hang on others
        keep = np.delete(keep, aliased(rest[:, keep]))
        new = Basis.of(rest[:, keep])
    p, k = design.p, new.p
    cross = design.Q.T @ columns[:, keep]
    own = _own(design, variables)
    basis = design.basis.beside(new, cross - own @ np.linalg.lstsq(own, cross)[0])
    names = tuple(f"{name} {j + 1}" for j in range(k)) if k > 1 else (name,)
    term = Term(name, tuple(range(p, p + k)), "numeric")
    pad = (0.0,) * k
    return replace(
        design,
        basis=basis,
        names=design.names + names,
        terms=(*design.terms, term),
        contrasts=tuple(Contrast(c.name, c.weights + pad, c.kind, c.of) for c in design.contrasts),
    )


def _own(design: Design, variables: Sequence[str]) -> Array:
    """(p, q) unit columns in Q: the constant, where it is spanned, and the terms in one variable alone."""
    alone = [t for t in design.terms if len(t.variables) == 1 and t.variables[0] in variables]
    one = np.ones(design.n) if design.root is None else design.root
    held = design.Q.T @ one
    spanned = held @ held >= (1 - 1e-12) * (one @ one)
    own = design.basis.R[:, [j for t in alone for j in t.columns]]
    own = np.column_stack([*([held] if spanned else []), own])
    return np.asarray(own / lengths(own))


def absorb(design: Design, part: Partition) -> tuple[Design, tuple[str, ...]]:
    """Cell means swept out of every column; the names of coefficients that this removes come back too."""
    if isinstance(design, PartedDesign):
        inner, _, removed = design.absorbed(part)
        return inner, removed
    root = np.ones(design.n) if design.root is None else design.root
    X = design.Q @ design.basis.R
    X = X - root[:, None] * (part.sums(X * root[:, None]) / part.sums(root**2)[:, None])[part.codes]
    original = np.linalg.norm(design.basis.R, axis=0)
    gone = [j for j in range(design.p) if np.linalg.norm(X[:, j]) <= 1e-9 * original[j]]
    keep = [j for j in range(design.p) if j not in gone]
    lost = [keep[i] for i in aliased(X[:, keep])] if keep else []
    keep = [j for j in keep if j not in lost]
    contrasts = tuple(
        Contrast(c.name, tuple(c.weights[j] for j in keep), c.kind, c.of)
        for c in design.contrasts
        if all(c.weights[j] == 0 for j in range(design.p) if j not in keep)
    )
    basis = Basis.of(X[:, keep]) if keep else Basis(np.zeros((design.n, 0)), np.zeros((0, 0)))
    derived = replace(
        design,
        basis=basis,
        names=tuple(design.names[j] for j in keep),
        terms=_of_columns(design.terms, keep),
        contrasts=contrasts,
        swept=design.swept + part.count,
    )
    return derived, tuple(design.names[j] for j in sorted({*gone, *lost}))


def only(design: Design, term: Term) -> Design:
    """The design with the constant and one term: for a term's unadjusted estimate."""
    keep = [j for t in design.terms if t.kind == "constant" for j in t.columns] + list(term.columns)
    return replace(
        design,
        basis=Basis.of(design.Q @ design.basis.R[:, keep]),
        names=tuple(design.names[j] for j in keep),
        terms=_of_columns(design.terms, keep),
        contrasts=(),
    )


def collapse(response: Response, part: Partition) -> Response:
    """Cell means of every column of the design and of y: one row per cell, no structures but places.

    Coefficients that vary only within cells drop out.
    """
    design = response.design
    root = np.ones(design.n) if design.root is None else design.root
    weight = part.sums(root**2)
    X = part.sums((design.Q @ design.basis.R) * root[:, None]) / weight[:, None]
    drop = set(aliased(X))
    keep = [j for j in range(design.p) if j not in drop]
    sites = design.spatial
    held = None
    if sites is not None and part.relation(sites.part) in ("same", "nested"):
        held = replace(sites, part=Partition("site", frozen(sites.part.codes[part.first]), sites.part.labels))
    small = Design(
        basis=Basis.of(X[:, keep]),
        names=tuple(design.names[j] for j in keep),
        terms=_of_columns(design.terms, keep),
        spatial=held,
        neighbours=design.neighbours if held is not None else (),
        covariates={k: part.means(v) for k, v in design.covariates.items()},
        known=design.known,
    )
    Y = part.sums(whole(response) * root[:, None]) / weight[:, None]
    return Response.of(small, Y)


def _of_columns(terms: Sequence[Term], keep: Sequence[int]) -> tuple[Term, ...]:
    """The terms that still have a column when only those kept are left, with the columns' new places."""
    place = {old: new for new, old in enumerate(keep)}
    left = ((t, tuple(place[j] for j in t.columns if j in place)) for t in terms)
    return tuple(replace(t, columns=columns) for t, columns in left if columns)


def whole(response: Response) -> Array:
    """(n, B) the weight-scaled Y that a response stands for."""
    return np.asarray(response.design.Q @ response.coef + response.residual)


def onto(response: Response, derived: Design) -> Response:
    """The same y over a derived design of the same rows (``extend`` or ``absorb``)."""
    design = response.design
    if derived.swept > design.swept:
        raise ValueError("use sweep() to carry y onto a design with absorbed groups")
    if derived.basis is design.basis:
        return replace(response, design=derived)
    if derived.basis.holds(design.basis):
        e = derived.basis.project(response.residual, first=design.p)
        coef = np.vstack([response.coef, derived.Q[:, design.p :].T @ response.residual])
        return Response(derived, frozen(coef), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))
    Y = whole(response)
    e = derived.basis.project(Y)
    return Response(derived, frozen(derived.Q.T @ Y), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))


def sweep(response: Response, derived: Design, part: Partition) -> Response:
    """The same y over a design from which the cells of ``part`` were absorbed."""
    if isinstance(response, PartedResponse):
        return response.swept(part)
    Y = whole(response)
    root = np.ones(derived.n) if derived.root is None else derived.root
    Y = Y - root[:, None] * (part.sums(Y * root[:, None]) / part.sums(root**2)[:, None])[part.codes]
    e = derived.basis.project(Y)
    return Response(derived, frozen(derived.Q.T @ Y), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))
