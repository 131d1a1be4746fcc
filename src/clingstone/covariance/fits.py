"""Error models by REML, fitted once on demand and read by every room above."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from clingstone.covariance.components import Algebra, Component
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths.once import Array
from clingstone.needs import Refusal
from clingstone.run import Run

Node = frozenset[str]


@dataclass(frozen=True, eq=False)
class ErrorModel:
    """A fitted error model; plain arrays over B columns of y.

    node : component keys in building order (group, serial, spatial).
    names, theta (d, B), at_bound (d, B) : working parameters.
    sigma2 (B,) : the profiled scale. loglik (B,) : restricted log-likelihood in the basis Q
    (add −ln|det R| for the value that lme4 and nlme print).
    variances : variance of each component and of "row" noise, (B,). shape : see ``Algebra.shape``.
    """

    node: tuple[str, ...]
    names: tuple[str, ...]
    theta: Array
    sigma2: Array
    loglik: Array
    at_bound: Array
    converged: Array
    variances: Mapping[str, Array]
    shape: Mapping[str, Array]
    history: tuple[str, ...] = ()

    def shares(self) -> Mapping[str, Array]:
        """(B,) share of the residual variance that each structure holds, and "row"; they add to 1.

        A share is the correlation of the nearest comparable rows: two rows of one group, two rows
        one base step apart in one series, two rows at one place. For a serial process without
        separate row noise the share is thus |ρ| times its variance, the rest counts as row noise.
        """
        raise NotImplementedError


class Fits:
    """The lattice of error models over one response.

    Attributes
    ----------
    components : supported components by key, in building order.
    refused : declared structures that the data cannot carry, with the reason.
    depth : "exact" for one column of y, "fast" (shared grid, interpolated) for many.
    """

    response: Response
    run: Run
    components: Mapping[str, Component]
    refused: Mapping[str, Refusal]

    def __init__(self, response: Response, run: Run) -> None:
        raise NotImplementedError

    @property
    def design(self) -> Design:
        return self.response.design

    @property
    def depth(self) -> str:
        return "exact" if self.response.B == 1 else "fast"

    def __getitem__(self, node: Iterable[str]) -> ErrorModel:
        """The REML fit of a set of components (the empty set is independence). Raises NotSupported."""
        raise NotImplementedError

    def algebra(self, node: Iterable[str]) -> Algebra:
        """The algebra of a set of components. Raises NotSupported(reason, hint)."""
        raise NotImplementedError

    @property
    def full_node(self) -> Node:
        """The largest set of supported components whose algebra these data can carry."""
        raise NotImplementedError

    @property
    def full(self) -> ErrorModel:
        return self[self.full_node]

    def without(self, key: str) -> ErrorModel:
        return self[self.full_node - {key}]

    def redraw(self, node: Iterable[str], B: int, purpose: str) -> Fits:
        """Parametric bootstrap: fits of B columns drawn from the fitted model of a node."""
        raise NotImplementedError

    def onto(self, derived: Design) -> Fits:
        """Fits of the same y over an extended design."""
        raise NotImplementedError
