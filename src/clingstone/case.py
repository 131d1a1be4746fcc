"""A case: the rows that a person brought, as a design and a response, and what happened on the way."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields, replace
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from clingstone.design import declare
from clingstone.design.design import Design
from clingstone.design.response import Response
from clingstone.display import Column, count, instead, listed
from clingstone.display import Table as Shown
from clingstone.intake import columns, files, fitted, formula, frames, model, wide
from clingstone.intake.columns import Columns, Role
from clingstone.intake.frames import Table
from clingstone.intake.model import Blocks
from clingstone.maths.once import Array, frozen
from clingstone.needs import InputError
from clingstone.run import Settings
from clingstone.summary import CaseSummary, group_summaries, serial_summary, spatial_summary


@dataclass(frozen=True, eq=False)
class Case:
    """A design, one column of y, and the way from the user's table to both.

    response : B = 1. kept : (n,) position in the user's table of each row of the design, in the
    design's own order (by series and time where time is declared). dropped : rows left out, by
    reason. notes : what a reader should know of the reading, one sentence each. origin : file, path
    as given, encoding, separator, decimal mark, fingerprint.
    """

    response: Response
    settings: Settings
    name: str
    formula: str
    response_name: str
    kept: npt.NDArray[np.int64]
    rows_read: int
    dropped: Mapping[str, int]
    notes: tuple[str, ...]
    origin: Mapping[str, str]
    transformed: str = ""

    @property
    def design(self) -> Design:
        return self.response.design

    # ---- ways in ------------------------------------------------------------------------

    @classmethod
    def of(cls, data: Any, settings: Settings) -> Case:
        """A case from a path, a data frame, or a fitted ordinary or weighted regression.

        Raises
        ------
        InputError : anything that the user can mend; the message says what, where and why.
        NotSupported : what was asked cannot be carried by these data.
        """
        if fitted.is_fit(data):
            return cls._of_fit(fitted.recover(data), settings, "data")
        if isinstance(data, (str, Path)):
            source = files.source(data, settings.sheet)
            return cls._of_table(frames.of_source(source), settings, {**source.origin, "path": str(data)})
        if settings.sheet is not None:
            raise InputError(
                f"sheet={settings.sheet!r} was given without a file, so it would do nothing",
                "Leave sheet= out.",
            )
        return cls._of_table(frames.table(data), settings, {})

    @classmethod
    def from_formula(cls, data: Any, model: str, **options: Any) -> Case:
        """A case from data and a formula; ``options`` are those of ``examine``."""
        return cls.of(data, _settings(options | {"model": model}))

    @classmethod
    def from_fit(cls, result: Any, data: Any = None, **options: Any) -> Case:
        """A case from an OLS or WLS result of statsmodels, or a PooledOLS result of linearmodels.

        ``data`` is the frame with ids, times and places; the frame of a formula is used where none
        is given (of linearmodels, its columns with entity and time). Rows are matched by their labels.
        """
        if not fitted.is_fit(result):
            raise InputError(
                f"a {type(result).__name__} was given where a fitted regression is needed",
                "Give the result of .fit() of an OLS or WLS model.",
            )
        return cls._of_fit(fitted.recover(result, data), _settings(options), "data")

    @classmethod
    def from_residuals(cls, residual: Any, data: Any = None, **options: Any) -> Case:
        """A case from residuals alone: tests run, refits are refused.

        ``residual`` is a column of ``data``, or values. A pandas Series goes with the row labels of
        a pandas frame; bare values go with rows by number and must be as many.
        """
        if isinstance(residual, str):
            return cls.of(data, _settings(options | {"residual": residual}))
        table, name = frames.with_residual(residual, data)
        return cls._of_table(table, _settings(options | {"residual": name}), {})

    @classmethod
    def _of_table(cls, table: Table, settings: Settings, origin: Mapping[str, str]) -> Case:
        if (settings.model is None) == (settings.residual is None):
            both = settings.model is not None
            raise InputError(
                "both model= and residual= were given" if both else "neither model= nor residual= was given",
                "Give a model such as 'y ~ x', or the name of a column of residuals with residual=.",
            )
        if settings.wide is not None and settings.wide != wide.NO:
            stems = (settings.wide,) if isinstance(settings.wide, str) else settings.wide
            table = wide.lengthened(table, stems)
        declared = declare.declaration(settings, table)
        parsed = None if settings.model is None else formula.parse(settings.model, table.names)
        roles: dict[Role, tuple[str, ...]] = {
            "response": parsed.made_of if parsed else (str(settings.residual),),
            "predictor": parsed.predictors if parsed else (),
            "weight": () if settings.weights is None else (settings.weights,),
            **declared.roles,
        }
        numeric = [*roles["weight"], *roles["place"], *(() if parsed else roles["response"])]
        used = [n for names in roles.values() for n in names]
        beside: tuple[str, ...] = ()
        if settings.wide is None:
            alone = not (roles["group"] or roles["time"])
            beside = wide.noticed(table.names, used, roles["response"], alone)
        table = table.holding(used)
        got = columns.gather(table, roles, settings.missing, numeric)
        if settings.weights is not None and settings.weights_kind == "frequency":
            got = columns.repeated(got, settings.weights)
        found = (
            model.blocks(parsed, got.frame, got.kept) if parsed else _residuals(got, str(settings.residual))
        )
        notes = (*got.notes, *beside)
        return cls._made(
            table, declared, settings, replace(got, notes=notes), found, _root(got, settings), origin
        )

    @classmethod
    def _of_fit(cls, fit: fitted.Fitted, settings: Settings, name: str) -> Case:
        for option in ("model", "residual", "weights"):
            if getattr(settings, option) is not None:
                raise InputError(
                    f"{option}= was given with a fitted model, which has its own", f"Leave {option}= out."
                )
        table = fit.table.take(fit.places)
        declared = declare.declaration(settings, table)
        roles: dict[Role, tuple[str, ...]] = {"predictor": fit.columns, **declared.roles}
        got = columns.gather(table, roles, settings.missing, list(roles["place"]))
        found = fit.blocks.ordered(got.kept)
        root = None if fit.weights is None else _scaled(fit.weights[got.kept])
        dropped = dict(got.dropped)
        if unused := fit.table.rows - len(fit.places):
            dropped = {"not used by the fit": unused} | dropped
        got = replace(
            got,
            kept=fit.places[got.kept],
            rows_read=fit.table.rows,
            dropped=dropped,
            notes=(*fit.notes, *got.notes),
        )
        return cls._made(
            table, declared, settings, got, found, root, {"file": name, "format": "fitted model"}
        )

    @classmethod
    def _made(
        cls,
        table: Table,
        declared: declare.Declaration,
        settings: Settings,
        got: Columns,
        found: Blocks,
        root: Array | None,
        origin: Mapping[str, str],
    ) -> Case:
        model.checked(found, root)
        held = declare.structures(declared, settings, got.frame, got.kept, table)
        found = found.ordered(held.order)
        root = None if root is None else root[held.order]
        design = declare.design(found, held, settings, root, known=settings.residual is None)
        return cls(
            response=Response.of(design, found.y),
            settings=settings,
            name=origin.get("file", "data"),
            formula=found.formula,
            response_name=found.response,
            kept=frozen(got.kept[held.order]),
            rows_read=got.rows_read,
            dropped=got.dropped,
            notes=(*got.notes, *found.notes, *held.notes),
            origin={**origin, "fingerprint": got.fingerprint},
            transformed=found.transformed,
        )

    # ---- ways out -----------------------------------------------------------------------

    def to_rows(self, values: npt.ArrayLike) -> Array:
        """Values (n,) or (n, k) of the design's rows in the order of the user's table; NaN where left out."""
        array = np.asarray(values, dtype=float)
        if array.shape[:1] != self.kept.shape:
            raise ValueError(f"{array.shape[:1]} values for {len(self.kept)} rows of the design")
        out = np.full((self.rows_read, *array.shape[1:]), np.nan)
        out[self.kept] = array
        return out

    def summary(self) -> CaseSummary:
        """What was read, dropped and declared, as plain numbers and words."""
        design = self.design
        return CaseSummary(
            name=self.name,
            n=design.n,
            p=design.p,
            response=self.response_name,
            formula=self.formula,
            terms=tuple(t.name for t in design.terms),
            coefficients=design.names,
            focus=tuple(t.name for t in design.focus()),
            varies={t.name: design.level_of(t.name) for t in design.terms},
            group=group_summaries(design),
            arrangement=design.group.arrangement if design.group is not None else "",
            serial=serial_summary(design),
            spatial=spatial_summary(design),
            assigned=dict(design.assignment.assigned),
            sampled=design.assignment.sampled or "",
            dropped=dict(self.dropped),
            rows_read=self.rows_read,
            notes=self.notes,
            origin=dict(self.origin),
            transformed=self.transformed,
        )

    def __repr__(self) -> str:
        what = self.formula or f"residuals {self.response_name}"
        return f"<Case {self.name}: {what}; {listed(self._parts())}>"

    def _parts(self) -> list[str]:
        """Rows, groups, series and sites in words."""
        design = self.design
        parts = [count(design.n, "row")]
        if design.group is not None:
            parts += [count(level.count, design.group.title(level.key)) for level in design.group.levels]
        if design.serial is not None:
            parts.append(f"{count(design.serial.part.count, 'series')} in {design.serial.name}")
        if design.spatial is not None:
            parts.append(count(design.spatial.count, "site"))
        return parts

    def table(self) -> Shown:
        """What was read, dropped and declared, for a person."""
        pairs = {"response": self.response_name, "model": self.formula or "not known: residuals alone"}
        pairs["rows"] = listed(self._parts())
        if self.dropped:
            pairs["left out"] = listed(f"{count(n, 'row')}: {why}" for why, n in self.dropped.items())
        if self.notes:
            pairs["noticed"] = " ".join(self.notes)
        columns = (Column("what", "what"), Column("value", "value"))
        return Shown.of(self.name, columns, pairs.items())

    def _repr_html_(self) -> str:
        return self.table().to_html()


def _settings(options: Mapping[str, Any]) -> Settings:
    """Settings from options by name; a list is a tuple, one name for several is a tuple of one."""
    names = [f.name for f in fields(Settings)]
    for name in options:
        if name not in names:
            raise InputError(f"there is no option ‘{name}’", instead(name, names))
    given: dict[str, Any] = {k: tuple(v) if isinstance(v, list) else v for k, v in options.items()}
    for name in ("focus", "means"):
        if isinstance(given.get(name), str):
            given[name] = (given[name],)
    return Settings(**given)


def _residuals(got: Columns, name: str) -> Blocks:
    """Residuals stand over the constant alone, with no terms."""
    y = got.frame[name].to_numpy(dtype=float)
    return Blocks(y, np.ones((len(y), 1)), ("constant",), (), name, "")


def _root(got: Columns, settings: Settings) -> Array | None:
    """Square roots of precision weights of mean 1."""
    if settings.weights is None or settings.weights_kind == "frequency":
        return None
    weight = got.frame[settings.weights].to_numpy(dtype=float)
    return None if np.all(weight == 1) else _scaled(weight)


def _scaled(weight: Array) -> Array:
    """Square roots of weights brought to a mean of 1: only their ratios are known to mean anything.

    The variance of single rows, and with it every share, is then that of a row of ordinary weight,
    whatever unit the weights came in.
    """
    return np.asarray(np.sqrt(weight / weight.mean()))
