"""Generalised least squares under error processes along time: fading correlation with row noise, ARMA."""

from __future__ import annotations

from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, ClassVar, Literal

import numpy as np

from clingstone.covariance.components import declared
from clingstone.covariance.processes import Arma as ArmaErrors
from clingstone.covariance.processes import Fading, Process, search, search_together
from clingstone.covariance.unbiased import Unbiased, unbiased
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.maths import curvature, reml
from clingstone.maths.search import Optimum
from clingstone.needs import Family, Limits, Needs, NotSupported
from clingstone.remedies.columns import Column, FittedReady, apart
from clingstone.remedies.linear import positive_m, reported
from clingstone.remedies.remedy import DATED, Account, Estimand, Estimates, Plain, Price
from clingstone.structure.serial import Series

if TYPE_CHECKING:
    from clingstone.covariance.fits import ErrorModel, Fits

NOISE_ASKED = 2.7055  # 5 % point of ½χ²₀ + ½χ²₁, the law of the likelihood ratio of a variance at zero
NOISE_ROWS = 20_000  # rows up to which row noise is looked for where no replicates ask for it
ARMA_ROWS = 20_000
ORDERS = ((1, 0), (2, 0), (3, 0), (0, 1), (1, 1))
SIMPLER = 4.0  # AICc by which another order must beat AR(1)


@dataclass(frozen=True, eq=False)
class Choice:
    """The process chosen for a response, and the words of the choice.

    start : an optimum under row noise, where another column's search may start; None where there is none.
    """

    process: Process
    found: Optimum
    items: tuple[tuple[str, str], ...] = ()
    notes: tuple[str, ...] = ()
    start: Optimum | None = None


@dataclass(frozen=True, eq=False, kw_only=True)
class ProcessReady(FittedReady, ABC):
    """GLS under a process that is chosen on the data and fitted to each column of y."""

    @abstractmethod
    def choose(self, response: Response) -> Choice:
        """The process for one column of y."""

    @abstractmethod
    def words(self, choice: Choice) -> str:
        """How the account names the process."""

    @property
    @abstractmethod
    def sources(self) -> str: ...

    @abstractmethod
    def chosen(self, columns: Sequence[Response]) -> list[Choice]:
        """The process of every column of y."""

    def fit(self, fits: Fits) -> Estimates:
        columns = apart(fits.response)
        choices = self.chosen(columns)
        return self.estimates(
            [self._fitted(c.process, c.found, one) for c, one in zip(choices, columns, strict=True)],
            fits.run.settings.confidence,
            np.array([bool(c.found.at_bound.any()) for c in choices]),
            np.array([c.found.converged for c in choices]),
            choices[0].notes,
        )

    def _fitted(self, process: Process, found: Optimum, y: Response) -> Column:
        here = process.gram(found.theta, y)
        delta, _, _ = reml.reduced(here)
        free = [int(i) for i in np.flatnonzero(~found.at_bound)]
        slopes = curvature.slopes(lambda theta: process.gram(theta, y), found.theta, free, self.design.m)
        return Column.bent(y.coef[:, 0] + delta[:, 0], slopes)

    def account(self, fits: Fits) -> Account:
        response = apart(fits.response)[0]
        choice = self.choose(response)
        gram = choice.process.gram(choice.found.theta, response)
        shape = choice.process.shape(choice.found.theta)
        s2 = float(reml.scale(gram, self.design.m)[0])
        series = _series(self.design)
        items = [("ρ per step", f"{shape['rho']:.6g}")]
        if "φ2" not in shape and "θ1" not in shape and (half := half_life(shape["rho"], series)):
            items.append(("half of the correlation is left after", half))
        if "noise" in shape:
            items.append(("share of row noise", f"{shape['noise']:.3f}"))
        items += [(name, f"{v:.6g}") for name, v in shape.items() if name[0] in "φθ"]
        total = s2 * shape.get("marginal", 1.0)
        total = s2 / shape["noise"] if "noise" in shape and shape["noise"] > 0 else total
        items += [("variance of an error", f"{total:.6g}"), *choice.items]
        return Account(
            estimator="generalised least squares, error parameters by restricted maximum likelihood: "
            f"{self.words(choice)}",
            covariance="σ²(X′V⁻¹X)⁻¹",
            factor="σ² = e′V⁻¹e/(n − p)",
            df_rule=self.rule,
            reference="t",
            items=(*items, *_unbiased_items(unbiased(response, fits.run.settings.confidence))),
            source=self.sources,
        )


def half_life(rho: float, series: Series) -> str:
    """The time after which half of a correlation is left, in the user's unit; "" where there is none."""
    if not 0 < rho < 1:
        return ""
    time = float(np.log(0.5) / np.log(rho) * series.step)
    unit = series.unit or "time unit"
    return f"{time:.3g} {unit}{'' if f'{time:.3g}' == '1' else 's'}"


def _unbiased_items(found: Unbiased | None) -> list[tuple[str, str]]:
    if found is None:
        return []
    return [
        (
            "median-unbiased ρ of a first-order process, with its exact interval",
            f"{found.rho:.2f} ({found.low:.2f} to {found.high:.2f})".replace("-", "−"),
        )
    ]


def _series(design: Design) -> Series:
    assert design.serial is not None
    return design.serial


def enough_times(design: Design, limits: Limits) -> Series:
    """The series, long enough to estimate. Raises NotSupported."""
    positive_m(design)
    series = design.serial
    if series is None:
        raise NotSupported("no serial structure was declared", "Name the time column with time=.")
    no = declared(design, limits)[1].get("serial")
    if no is not None:
        raise no.error()
    return series


# ---- car1 -----------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False, kw_only=True)
class FadingReady(ProcessReady):
    """noise : "auto" looks for it, "yes" and "no" say."""

    noise: Literal["auto", "yes", "no"]

    def chosen(self, columns: Sequence[Response]) -> list[Choice]:
        """Each asks for row noise or not; its search starts from the first that found some."""
        out: list[Choice] = []
        for one in columns:
            near = next((c.start for c in out if c.start is not None and not c.start.at_bound.any()), None)
            out.append(self.choose(one, near))
        return out

    def choose(self, response: Response, near: Optimum | None = None) -> Choice:
        series = _series(self.design)
        if series.ties or self.noise == "yes":
            process: Process = Fading(self.design, noise=True)
            found = search(process, response, near)
            return Choice(process, found, start=found)
        plain: Process = Fading(self.design)
        found = search(plain, response)
        if self.noise == "no":
            return Choice(plain, found)
        if self.design.n > NOISE_ROWS:
            note = f"Row noise was not looked for: the table has more than {NOISE_ROWS:,} rows."
            return Choice(plain, found, notes=(note,))
        noisy: Process = Fading(self.design, noise=True)
        with_noise = search(noisy, response, near)
        gain = found.value - with_noise.value
        items = (
            ("likelihood ratio of row noise", f"{max(gain, 0.0):.2f} (asked for above {NOISE_ASKED:.2f})"),
        )
        if gain > NOISE_ASKED and not with_noise.at_bound[1]:
            return Choice(noisy, with_noise, items, start=with_noise)
        return Choice(plain, found, items, start=with_noise)

    def words(self, choice: Choice) -> str:
        base = "correlation that fades with elapsed time (continuous-time AR(1))"
        return f"{base}, and row noise" if choice.process.key.endswith("noise") else base

    @property
    def sources(self) -> str:
        return "jones-1980, patterson-thompson-1971, satterthwaite-1946"


def under_noise(fits: Fits) -> Mapping[str, float] | None:
    """ρ and share of row noise of a fading process under row noise, where column 0 asks for it; else None.

    A slow process under noise is no first-order process: fitted as one its ρ falls between the two, and
    says too little of how far it reaches.
    """
    design = fits.design
    if design.n > NOISE_ROWS or _series(design).ties:
        return None
    response = fits.response if fits.response.B == 1 else fits.response.column(0)
    noisy: Process = Fading(design, noise=True)
    plain, found = search(Fading(design), response), search(noisy, response)
    asked = plain.value - found.value > NOISE_ASKED and not found.at_bound[1]
    return noisy.shape(found.theta) if asked else None


@dataclass(frozen=True)
class Car1(Plain):
    """A correlation that fades geometrically with elapsed time, and row noise where the data ask for it.

    Exact at any spacing, linear in the rows (Jones 1980). With ``ties="replicate"`` rows of one time are
    repeats of one visit, which row noise tells apart. ρ cannot be negative.
    """

    noise: Literal["auto", "yes", "no"] = "auto"
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "car1"
    name: ClassVar[str] = "errors that fade with elapsed time"
    covers: ClassVar[frozenset[Family]] = frozenset({"serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = DATED
    source: ClassVar[str] = "jones-1980"
    price: ClassVar[Price | None] = Price(40_000.0, 20.0)

    def prepare(self, design: Design, working: ErrorModel | None) -> FadingReady:
        series = enough_times(design, self.limits)
        if series.ties and self.noise == "no":
            raise NotSupported("rows that share a time need row noise to differ by", "Leave noise at auto.")
        names, W = reported(design)
        return FadingReady(design, names, W, "Satterthwaite", noise=self.noise)

    def conventions(self) -> tuple[tuple[str, Car1], ...]:
        return (
            ("without row noise", Car1("no", self.at, self.limits)),
            ("with row noise, whether the data ask for it or not", Car1("yes", self.at, self.limits)),
        )


# ---- arma -----------------------------------------------------------------------------------


@dataclass(frozen=True, eq=False, kw_only=True)
class ArmaReady(ProcessReady):
    orders: tuple[tuple[int, int], ...]

    def fit(self, fits: Fits) -> Estimates:
        for p, q in self.orders:
            search_together(ArmaErrors(self.design, p, q), fits)
        return super().fit(fits)

    def chosen(self, columns: Sequence[Response]) -> list[Choice]:
        """The first chooses the order for all."""
        first = self.choose(columns[0])
        rest = [search(first.process, one, first.found) for one in columns[1:]]
        return [first, *(replace(first, found=one) for one in rest)]

    def choose(self, response: Response) -> Choice:
        m = self.design.m
        table = {}
        for p, q in self.orders:
            process = ArmaErrors(self.design, p, q)
            k = p + q + 1
            if m - k - 1 < 1:
                continue
            found = search(process, response)
            table[p, q] = (found.value + 2 * k * m / (m - k - 1), process, found)
        best = min(table, key=lambda order: table[order][0])
        if (1, 0) in table and table[1, 0][0] - table[best][0] <= SIMPLER:
            best = (1, 0)
        score, process, found = table[best]
        shown = "; ".join(f"{_order(o)} {v[0] - score:+.1f}".replace("-", "−") for o, v in table.items())
        items = (("AICc against the chosen order", shown),) if len(table) > 1 else ()
        return Choice(process, found, items)

    def words(self, choice: Choice) -> str:
        process = choice.process
        assert isinstance(process, ArmaErrors)
        return f"{_order((process.p, process.q))} over {_series(self.design).name}"

    @property
    def sources(self) -> str:
        return "ansley-1979, hurvich-tsai-1989, satterthwaite-1946"


def _order(order: tuple[int, int]) -> str:
    p, q = order
    return f"AR({p})" if q == 0 else f"MA({q})" if p == 0 else f"ARMA({p},{q})"


@dataclass(frozen=True)
class Arma(Plain):
    """ARMA errors within series, the order by AICc from AR(1), AR(2), AR(3), MA(1) and ARMA(1,1).

    AR(1) stays unless another order is better by more than 4. The likelihood is exact, missing steps
    included. The order is chosen on the data, and the intervals do not know that it was: of many columns
    of y (a rehearsal) the first chooses the order for all, and each has its own parameters.
    """

    orders: tuple[tuple[int, int], ...] = ORDERS
    at: str = ""
    limits: Limits = field(default_factory=Limits)
    id: ClassVar[str] = "arma"
    name: ClassVar[str] = "ARMA errors along time"
    covers: ClassVar[frozenset[Family]] = frozenset({"serial"})
    estimand: ClassVar[Estimand] = "pooled"
    needs: ClassVar[Needs] = Needs(parts=frozenset({"serial"}), known_design=True, unweighted=True)
    source: ClassVar[str] = "ansley-1979"
    price: ClassVar[Price | None] = Price(40_000.0, 50.0)

    def prepare(self, design: Design, working: ErrorModel | None) -> ArmaReady:
        series = enough_times(design, self.limits)
        if series.tick is None or series.ties:
            what = "the times are irregularly spaced" if series.tick is None else "rows share their times"
            raise NotSupported(f"{what}, and an ARMA process goes by whole steps", "Use car1.")
        if design.n > ARMA_ROWS:
            raise NotSupported(
                f"{design.n:,} rows; the search over orders is made for {ARMA_ROWS:,} or fewer",
                "Use ar1, or hac, which needs no model of the dependence.",
            )
        ArmaErrors(design, 1, 0).steps  # noqa: B018 - raises where too many steps are missing
        longest = int(series.part.sizes.max())
        orders = tuple(o for o in self.orders if max(o) <= max(1, longest // 10) or o == (1, 0))
        names, W = reported(design)
        return ArmaReady(design, names, W, "Satterthwaite", orders=orders or ((1, 0),))

    def conventions(self) -> tuple[tuple[str, Arma], ...]:
        return tuple(
            (f"{_order(order)} whatever AICc says", Arma((order,), self.at, self.limits))
            for order in self.orders
            if len(self.orders) > 1
        )
