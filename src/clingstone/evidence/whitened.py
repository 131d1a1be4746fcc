"""Residuals freed of a fitted dependence, for tests that take the rows as independent."""

from __future__ import annotations

from functools import partial

import numpy as np

from clingstone.covariance.algebras import Chosen
from clingstone.covariance.each import each
from clingstone.covariance.fits import Fits, Node
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.once import Array, frozen, kept


def whitened(fits: Fits, node: Node) -> Response:
    """Columns W(e − Qδ) with W'W = V̂⁻¹ and δ of the generalised fit; ``coef`` holds its fitted values.

    Under V = V̂ they are uncorrelated with one variance. W goes from the rows upwards (a row less what the
    row before it, its group and its neighbours say of it), so that each stays with its own row and a spread
    that follows a covariate still does. Raises NotSupported where the algebra cannot whiten rows.
    """
    if fits.whole is not None:
        every, b = fits.whole
        return whitened(every, node).column(b)
    return kept(fits.response, ("whitened", node, fits.run.limits), partial(_whitened, fits, node))


def _whitened(fits: Fits, node: Node) -> Response:
    design, response, model, algebra = fits.design, fits.response, fits[node], fits.algebra(node)
    delta = _moved(response, model.theta, algebra)
    white, left = np.empty_like(response.residual), response.residual - design.Q @ delta
    for b in range(response.B):
        white[:, b] = algebra.whiten(model.theta[:, b], left[:, b : b + 1])[:, 0]
    coef = response.coef + delta
    return Response(design, frozen(coef), frozen(white), frozen(np.einsum("ij,ij->j", white, white)))


def _moved(response: Response, theta: Array, algebra: Chosen) -> Array:
    """(p, B) δ, from ordinary to generalised least squares, each column of y at its own θ (d, B)."""
    many = each(algebra, response) if response.B > 1 and len(theta) else None
    if many is not None:
        return many.grams(theta, np.arange(response.B)).reduced()[0].T
    found = [reml.reduced(algebra.gram(at, response.column(b)))[0] for b, at in enumerate(theta.T)]
    return np.hstack(found)
