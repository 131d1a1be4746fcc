"""Residuals freed of a fitted dependence, for tests that take the rows as independent."""

from __future__ import annotations

from functools import partial

import numpy as np

from clingstone.covariance.fits import Fits, Node
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.once import frozen, kept


def whitened(fits: Fits, node: Node) -> Response:
    """Columns W(e − Qδ) with W'W = V̂⁻¹ and δ of the generalised fit; ``coef`` holds its fitted values.

    Under V = V̂ they are uncorrelated with one variance. W goes from the rows upwards (a row less what the
    row before it, its group and its neighbours say of it), so that each stays with its own row and a spread
    that follows a covariate still does. Raises NotSupported where the algebra cannot whiten rows.
    """
    return kept(fits.response, ("whitened", node, fits.run.limits), partial(_whitened, fits, node))


def _whitened(fits: Fits, node: Node) -> Response:
    design, response, model, algebra = fits.design, fits.response, fits[node], fits.algebra(node)
    coef, white = np.empty_like(response.coef), np.empty_like(response.residual)
    for b in range(response.B):
        one, theta = response.column(b), model.theta[:, b]
        delta = reml.reduced(algebra.gram(theta, one))[0]
        coef[:, b] = (one.coef + delta)[:, 0]
        white[:, b] = algebra.whiten(theta, one.residual - design.Q @ delta)[:, 0]
    return Response(design, frozen(coef), frozen(white), frozen(np.einsum("ij,ij->j", white, white)))
