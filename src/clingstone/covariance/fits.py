"""Error models by REML, fitted once on demand and read by every room above."""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from clingstone.covariance.algebras import Chosen, choose
from clingstone.covariance.components import Component, declared, on_request
from clingstone.covariance.each import each
from clingstone.covariance.thin import thin
from clingstone.design.derived import onto
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import reml
from clingstone.maths.lattice import minimise_columns
from clingstone.maths.once import Array, frozen, kept
from clingstone.maths.search import Flags, Optimum, minimise
from clingstone.needs import NotSupported, Refusal, memory
from clingstone.run import Run

Node = frozenset[str]
Depth = Literal["exact", "fast"]

FACED = 2  # the most working parameters that a shared grid serves
START_SITES = 400  # places that give a large spatial search its start
SLOW_COLUMNS = 200  # columns that a bootstrap gets when each needs a search of its own


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
    at_bound: Flags
    converged: Flags
    variances: Mapping[str, Array]
    shape: Mapping[str, Array]
    history: tuple[str, ...] = ()

    def column(self, b: int) -> ErrorModel:
        """The model of one column of y."""
        pick = slice(b, b + 1)
        return replace(
            self,
            theta=self.theta[:, pick],
            sigma2=self.sigma2[pick],
            loglik=self.loglik[pick],
            at_bound=self.at_bound[:, pick],
            converged=self.converged[pick],
            variances={key: v[pick] for key, v in self.variances.items()},
            shape={key: v[pick] for key, v in self.shape.items()},
        )

    def shares(self) -> Mapping[str, Array]:
        """(B,) share of the residual variance that each structure holds, and "row"; they add to 1.

        A share is the correlation of the nearest comparable rows: two rows of one group, two rows
        one base step apart in one series, two rows at one place. For a serial process without
        separate row noise the share is thus |ρ| times its variance, the rest counts as row noise.
        """
        total = np.sum(list(self.variances.values()), axis=0)
        return {key: variance / total for key, variance in self.variances.items()}


class Fits:
    """The lattice of error models over one response.

    Attributes
    ----------
    components : supported components by key, in building order.
    refused : declared structures that the data cannot carry, with the reason.
    left_out : supported components that the joint model of ``full_node`` does without, with the reason.
    depth : "exact", or "fast" (shared grid, interpolated), the default for many columns of y.
    whole : the fits of many columns of which this is one, and which; its models are theirs.
    near : the fits of the same y over the design that this one extends, or None.

    Notes
    -----
    "fast" serves models of one or two working parameters. Against "exact", column by column, on bootstraps
    of sleepstudy, Dyestuff, Hsb82, LakeHuron, Ovary, Grunfeld, Pastes and the Baltimore houses: shares
    agreed to 3e-5 and log-likelihoods to 2e-5; variances within 1e-4 in −2ℓ_R of being as well left out
    are put at zero (a share of up to 0.003), and a row noise that runs to zero stops at the grid's end
    (share 0.004, on the Columbus data). Models of three or more working parameters are searched for
    every column, all at once where their algebra can, else from the first column's optimum; a bootstrap of
    such a model has at most 200 columns.
    """

    response: Response
    run: Run
    components: Mapping[str, Component]
    refused: Mapping[str, Refusal]

    def __init__(
        self,
        response: Response,
        run: Run,
        *,
        depth: Depth | None = None,
        whole: tuple[Fits, int] | None = None,
        near: Fits | None = None,
    ) -> None:
        self.response, self.run, self.whole, self.near = response, run, whole, near
        self.depth: Depth = depth or ("exact" if response.B == 1 else "fast")
        self.components, self.refused = kept(
            self.design, ("declared", run.limits), lambda: declared(response.design, run.limits)
        )
        self._models: dict[Node, ErrorModel] = {}
        self._optima: dict[Node, Optimum] = {}  # of searches that another may start from

    @property
    def design(self) -> Design:
        return self.response.design

    @property
    def tails(self) -> str:
        """How tails of a statistic are read (``Ratio.tails``): of many exact columns between exact ones.

        Where a wider mean is tried, four moments do for large sparse forms.
        """
        if self.near is not None:
            return "fast"
        return "between" if self.depth == "exact" and self.response.B > 1 else self.depth

    def column(self, b: int) -> Fits:
        """Those of one column of y, each model fitted with all the others'."""
        return Fits(self.response.column(b), self.run, whole=(self, b))

    def __getitem__(self, node: Iterable[str]) -> ErrorModel:
        """The REML fit of a set of components (the empty set is independence). Raises NotSupported."""
        key = frozenset(node)
        if key not in self._models:
            self._models[key] = self._fit(key)
        return self._models[key]

    def component(self, key: str) -> Component:
        """One component: declared, or fitted only on request (slopes). Raises NotSupported."""
        if key in self.components:
            return self.components[key]
        if key in self.refused:
            raise self.refused[key].error()
        return on_request(self.design, key, self.run.limits)

    def ordered(self, node: Iterable[str]) -> tuple[str, ...]:
        """Keys in building order: declared components first, then those on request by name."""
        keys = frozenset(node)
        known = tuple(k for k in self.components if k in keys)
        return (*known, *sorted(keys - set(known)))

    def algebra(self, node: Iterable[str]) -> Chosen:
        """The algebra of a set of components. Raises NotSupported(reason, hint)."""
        key = frozenset(node)
        chosen = tuple(self.component(name) for name in self.ordered(key))
        limits = self.run.limits
        return kept(self.design, ("algebra", key, limits), lambda: choose(self.design, chosen, limits))

    @property
    def full_node(self) -> Node:
        """The largest set of supported components whose algebra these data can carry.

        Of sets of equal size, the one that keeps the earlier components.
        """
        return self._full[0]

    @property
    def left_out(self) -> Mapping[str, Refusal]:
        return self._full[1]

    @property
    def _full(self) -> tuple[Node, Mapping[str, Refusal]]:
        return kept(self.design, ("full", self.run.limits), self._largest)

    def _largest(self) -> tuple[Node, Mapping[str, Refusal]]:
        keys = tuple(self.components)
        why: NotSupported | None = None
        for size in range(len(keys), 0, -1):
            for some in itertools.combinations(keys, size):
                try:
                    self.algebra(some)
                except NotSupported as stop:
                    why = why or stop
                    continue
                out = {k: Refusal(str(why), why.hint) for k in keys if k not in some} if why else {}
                return frozenset(some), out
        return frozenset(), {}

    @property
    def full(self) -> ErrorModel:
        return self[self.full_node]

    def without(self, key: str) -> ErrorModel:
        return self[self.full_node - {key}]

    def redraw(self, node: Iterable[str], B: int, purpose: str) -> Fits:
        """Parametric bootstrap: fits of B columns drawn from the fitted model of a node.

        The draws come from the first column's estimates, with a mean of zero (every statistic of the
        residuals, and every interval's coverage, is the same whatever the mean). When the node needs
        a search for each column (three or more working parameters), at most 200 columns are drawn:
        read ``response.B``.
        """
        algebra, model = self.algebra(node), self[node]
        if len(algebra.parameters) > FACED:
            B = min(B, SLOW_COLUMNS)
        memory(4 * 8.0 * self.design.n * B, f"{B:,} simulated columns of {self.design.n:,} rows")
        rng = self.run.child(f"redraw:{purpose}:{'+'.join(model.node)}")
        Y = algebra.draw(model.theta[:, 0], float(model.sigma2[0]), rng, B)
        return Fits(_response(self.design, Y), self.run)

    def onto(self, derived: Design) -> Fits:
        """Fits of the same y over an extended design; a heavy search starts where that of this one ended."""
        return Fits(onto(self.response, derived), self.run, depth=self.depth, near=self)

    # ---- one node -----------------------------------------------------------------------

    def _fit(self, node: Node) -> ErrorModel:
        algebra = self.algebra(node)
        self._check()
        d = len(algebra.parameters)
        if self.whole is not None:
            whole, b = self.whole
            return whole[node].column(b)
        if d == 0:
            return self._independent()
        if self.response.B == 1:
            return self._exact(node, algebra)
        if self.depth == "exact":
            return self._each(node, algebra)
        if d <= FACED:
            return self._fast(node, algebra)
        alone = each(algebra, self.response) is None
        return self._one_by_one(node, algebra) if alone else self._each(node, algebra)

    def _check(self) -> None:
        if self.design.m < 1:
            raise NotSupported(
                f"{self.design.n} rows and {self.design.n - self.design.m} coefficients leave nothing to "
                "estimate a variance from",
                "More rows, or a smaller model, would be needed.",
            )
        size = np.einsum("ij,ij->j", self.response.coef, self.response.coef) + self.response.ss
        if bool(np.any(self.response.ss <= 1e-24 * size)):
            raise NotSupported(
                "the model fits every row exactly, so no residual variance is left",
                "Look for the response, or a copy of it, among the predictors.",
            )

    def _independent(self) -> ErrorModel:
        gram = reml.independent(self.design.p, self.response.ss)
        B = self.response.B
        value = reml.criterion(gram, self.design.m)
        none = np.zeros((0, B))
        return self._model(
            frozenset(), none, self.response.s2, value, none.astype(bool), np.ones(B, dtype=bool), ()
        )

    def _model(
        self,
        node: Node,
        theta: Array,
        sigma2: Array,
        value: Array,
        at_bound: Flags,
        converged: Flags,
        history: tuple[str, ...],
    ) -> ErrorModel:
        algebra = self.algebra(node)
        variances = algebra.variances(theta, sigma2)
        order = self.ordered(node)
        if node == self.full_node:
            history += tuple(f"{k} is not in the joint model: {r.reason}" for k, r in self.left_out.items())
        return ErrorModel(
            order,
            tuple(p.name for p in algebra.parameters),
            frozen(theta),
            frozen(sigma2),
            frozen(-value / 2),
            frozen(_idle(algebra, theta, at_bound)),
            frozen(converged),
            variances,
            algebra.shape(theta),
            history,
        )

    def _exact(self, node: Node, algebra: Chosen) -> ErrorModel:
        with self.run.progress("fitting " + ", ".join(sorted(node)), 1) as advance:
            best = self._search(algebra, self._head_start(node) if algebra.heavy else None, thinned=True)
            advance(1)
        if algebra.heavy:
            self._optima[node] = best
        sigma2 = reml.scale(algebra.gram(best.theta, self.response), self.design.m)
        theta, bound = best.theta[:, None], best.at_bound[:, None]
        done = np.array([best.converged])
        return self._model(node, theta, sigma2, np.array([best.value]), bound, done, best.history)

    def _search(self, algebra: Chosen, warm: Optimum | None = None, thinned: bool = False) -> Optimum:
        """The optimum for the first column of y; warm, thinned : see ``minimise``."""
        column, m = self.response.column(0), self.design.m

        def value(theta: Array) -> float:
            return float(reml.criterion(algebra.gram(theta, column), m)[0])

        found = algebra.minimum(column, m, warm)
        if found is not None:
            return found
        if len(algebra.parameters) == 1 and (many := each(algebra, column)) is not None:
            return many.minima().optimum()
        return minimise(algebra.field(column, m) or value, algebra.parameters, warm=warm, thinned=thinned)

    def _head_start(self, node: Node) -> Optimum | None:
        """The optimum under the design that this one extends, or else for some of the places.

        Of the latter the curvature is scaled up to all rows; None if they are too few.
        """
        if self.near is not None and node in self.near._optima:
            return self.near._optima[node]
        sites = self.design.spatial
        assert sites is not None  # no other algebra is heavy
        places = min(START_SITES, sites.count // 3)
        small = Fits(thin(self.response, places, self.run.child("places to start from")), self.run)
        try:
            found = small._search(small.algebra(node))
        except NotSupported:
            return None
        box = np.array([[p.low, p.high] for p in self.algebra(node).parameters])
        start = np.clip(found.start, box[:, 0], box[:, 1])
        return replace(found, start=start, curvature=found.curvature * self.design.m / small.design.m)

    def _fast(self, node: Node, algebra: Chosen) -> ErrorModel:
        m, p = self.design.m, self.design.p

        def surface(thetas: Array) -> tuple[Array, Array]:
            value = np.empty((thetas.shape[1], self.response.B))
            log_rss = np.empty_like(value)
            for k, gram in enumerate(algebra.grams(thetas, self.response)):
                _, c, logdet = reml.reduced(gram)
                value[k] = gram.logdet + logdet + reml.profiled(c, m)
                log_rss[k] = np.log(np.maximum(c, 1e-300))
            return value, log_rss

        best = minimise_columns(surface, algebra.parameters)
        note = f"shared grid of θ, interpolated, for {self.response.B:,} columns of y ({p} coefficients)"
        return self._model(
            node,
            best.theta,
            np.exp(best.log_rss) / m,
            best.value,
            best.at_bound,
            np.ones(self.response.B, dtype=bool),
            (note,),
        )

    def _each(self, node: Node, algebra: Chosen) -> ErrorModel:
        """Every column searched as if it were alone."""
        many = each(algebra, self.response)
        if many is None:
            return _joined([Fits(self.response.column(b), self.run)[node] for b in range(self.response.B)])
        found = many.minima()
        _, c, _ = many.grams(found.theta, np.arange(self.response.B)).reduced()
        scale = c / self.design.m
        return self._model(node, found.theta, scale, found.value, found.at_bound, found.converged, ())

    def _one_by_one(self, node: Node, algebra: Chosen) -> ErrorModel:
        warm: Optimum | None = None
        found = []
        with self.run.progress("fitting " + ", ".join(sorted(node)), self.response.B) as advance:
            for b in range(self.response.B):
                one = Fits(self.response.column(b), self.run)
                best = one._search(algebra, warm)
                if not best.converged:
                    best = one._search(algebra)
                # From a component at zero no search comes back: such an optimum starts no other column.
                warm = best if warm is None and not best.at_bound.any() else warm
                gram = algebra.gram(best.theta, one.response)
                found.append((best, float(reml.scale(gram, self.design.m)[0])))
                advance(1)
        return self._model(
            node,
            np.stack([best.theta for best, _ in found], axis=1),
            np.array([sigma2 for _, sigma2 in found]),
            np.array([best.value for best, _ in found]),
            np.stack([best.at_bound for best, _ in found], axis=1),
            np.array([best.converged for best, _ in found]),
            (f"{self.response.B:,} columns of y, each searched from the first inner optimum",),
        )


def _joined(models: Sequence[ErrorModel]) -> ErrorModel:
    """The models of single columns as one of many."""

    def along(parts: Sequence[Mapping[str, Array]]) -> dict[str, Array]:
        return {key: np.concatenate([np.ravel(part[key]) for part in parts]) for key in parts[0]}

    return replace(
        models[0],
        theta=np.hstack([m.theta for m in models]),
        sigma2=np.concatenate([m.sigma2 for m in models]),
        loglik=np.concatenate([m.loglik for m in models]),
        at_bound=np.hstack([m.at_bound for m in models]),
        converged=np.concatenate([m.converged for m in models]),
        variances=along([m.variances for m in models]),
        shape=along([m.shape for m in models]),
    )


def _response(design: Design, Y: Array) -> Response:
    """A response from Y that is already on the scale of the basis."""
    e = design.basis.project(Y)
    return Response(design, frozen(design.Q.T @ Y), frozen(e), frozen(np.einsum("ij,ij->j", e, e)))


def _idle(algebra: Chosen, theta: Array, at_bound: Flags) -> Flags:
    """Bounds, and with them the shape of a component of zero variance: it is not identified."""
    out = at_bound.copy()
    for piece in algebra.pieces:
        where = algebra.slices[piece.key]
        if where.stop - where.start > 1:
            out[where] |= piece.variance(theta[where]) == 0
    return out
