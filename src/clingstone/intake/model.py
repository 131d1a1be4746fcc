"""A formula and columns → response, design columns, their names and terms."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from clingstone.display import count, listed, quoted, rows
from clingstone.intake import formula as notation
from clingstone.intake.columns import mostly_numbers, text_error
from clingstone.intake.formula import Parsed
from clingstone.maths.basis import aliased
from clingstone.maths.once import Array
from clingstone.needs import InputError, memory

if TYPE_CHECKING:
    import pandas as pd

MOST_COUNTS = 12  # distinct whole numbers of a response up to which they are taken for counts or ratings
LEAST_SPREAD = 1e-60  # of a response, and its inverse the most: fourth powers of it are summed
MOST_CODES = 5  # distinct whole numbers of a predictor up to which they may be the codes of a factor
Kind = Literal["constant", "numeric", "factor", "interaction"]


@dataclass(frozen=True)
class TermBlock:
    """One term: the places of its columns, what it is, the data columns that it uses."""

    name: str
    columns: tuple[int, ...]
    kind: Kind
    variables: tuple[str, ...] = ()


@dataclass(frozen=True, eq=False)
class Blocks:
    """What a model makes of the rows.

    y (n,), X (n, p), names (p,). covariates : raw numeric predictors. levels : factor → its
    levels. remake : columns X with every row set to given levels, where the model can be evaluated
    anew (rows then stand in the order in which the blocks were made).
    """

    y: Array
    X: Array
    names: tuple[str, ...]
    terms: tuple[TermBlock, ...]
    response: str
    formula: str
    transformed: str = ""
    covariates: Mapping[str, Array] = field(default_factory=dict)
    levels: Mapping[str, tuple[Any, ...]] = field(default_factory=dict)
    remake: Callable[[Mapping[str, Any]], Array] | None = None
    notes: tuple[str, ...] = ()

    def ordered(self, order: npt.NDArray[np.int64]) -> Blocks:
        """The same blocks with the rows in another order (or repeated)."""
        return replace(
            self,
            y=self.y[order],
            X=self.X[order],
            covariates={k: v[order] for k, v in self.covariates.items()},
        )


def blocks(parsed: Parsed, frame: pd.DataFrame, kept: npt.NDArray[np.int64]) -> Blocks:
    """Response and design columns of a formula on rows without missing values.

    Text, true/false and categorical columns are factors; the first level is the reference. A
    column of numbers stays a number, however few values it has.

    Raises
    ------
    InputError : text where numbers are needed, values that a function cannot take, a factor with
        one level.
    """
    from formulaic.errors import FormulaicError

    _check_text(parsed, frame, kept)
    data = _factors(parsed, frame)
    _check_size(parsed, data)
    try:
        with np.errstate(all="ignore"):  # what is not finite is told below, with its rows
            matrices: Any = parsed.formula.get_model_matrix(data, context={}, na_action="ignore")
    except FormulaicError as error:
        raise _evaluation_error(parsed, frame, kept, error) from error
    left, right = matrices.lhs, matrices.rhs
    spec = right.model_spec
    names, terms = _named(spec, data)
    y = np.asarray(left, dtype=float)[:, 0]
    X = np.asarray(right, dtype=float)
    _check_values(parsed.response, y, kept)
    for j, name in enumerate(names):
        _check_values(name, X[:, j], kept)
    return Blocks(
        y=y,
        X=X,
        names=names,
        terms=terms,
        response=parsed.response,
        formula=parsed.text,
        transformed=parsed.transformed,
        covariates=_covariates(parsed, data),
        levels=_levels(parsed, data),
        remake=lambda cell: np.asarray(spec.get_model_matrix(_set(data, cell), context={}), dtype=float),
        notes=(*_remarks(y, parsed.response), *_codes(parsed, terms, data)),
    )


def _set(data: pd.DataFrame, cell: Mapping[str, Any]) -> pd.DataFrame:
    """The same rows with some factors held at one level."""
    import pandas as pd

    changed = data.copy()
    for name, level in cell.items():
        changed[name] = pd.Series([level] * len(data), index=data.index).astype(data[name].dtype)
    return changed


def checked(found: Blocks, root: Array | None = None) -> Blocks:
    """The same blocks, if a regression on them is possible.

    Raises
    ------
    InputError : constant response, no more rows than coefficients, dependent columns (named, with
        a set to drop).
    """
    n, p = found.X.shape
    if n <= p:
        widest = max(found.terms, key=lambda t: len(t.columns), default=None)
        most = (
            f" ({widest.name} alone has {len(widest.columns)})" if widest and len(widest.columns) > 1 else ""
        )
        raise InputError(
            f"{count(n, 'row')} cannot carry {count(p, 'coefficient')}{most}: nothing is left over "
            "to judge by",
            "Use fewer terms or more rows. Many groups belong in group=, not in the formula.",
        )
    if np.ptp(found.y) <= 1e-13 * np.abs(found.y).max():
        raise _constant_error(found)
    spread = float(np.ptp(found.y))
    if not LEAST_SPREAD < spread < 1 / LEAST_SPREAD:
        raise InputError(
            f"the response {found.response} spreads over {spread:.3g}, and squares of numbers of that size "
            f"are beyond what a computer holds",
            f"Give {found.response} in another unit.",
        )
    X = found.X if root is None else found.X * root[:, None]
    lost = aliased(X)
    if lost:
        raise _aliased_error(found, X, lost)
    return found


def _constant_error(found: Blocks) -> InputError:
    """The same value in all rows, or values that differ by no more than rounding of their size."""
    n, spread = len(found.y), float(np.ptp(found.y))
    if spread == 0:
        return InputError(
            f"the response {found.response} is {found.y[0]:.10g} in all {n:,} rows, so there is "
            "nothing to explain",
            "Check the column and the rows that were kept.",
        )
    return InputError(
        f"the response {found.response} lies near {found.y[0]:.6g} in all {n:,} rows and differs by "
        f"{spread:.2g} at the most, no more than the rounding of numbers of that size",
        "Take a constant near all values off the column, before it is stored.",
    )


def _aliased_error(found: Blocks, X: Array, lost: tuple[int, ...]) -> InputError:
    names = found.names
    j = lost[0]
    kept = [k for k in range(len(names)) if k not in lost]
    if not np.any(X[:, j]):
        reason = f"{names[j]} is 0 in every row"
    else:
        weight = np.linalg.lstsq(X[:, kept], X[:, j], rcond=None)[0]
        size = np.linalg.norm(X[:, kept], axis=0) * np.abs(weight)
        used = [names[k] for k, s in zip(kept, size, strict=True) if s > 1e-8 * np.linalg.norm(X[:, j])]
        reason = f"{names[j]} follows exactly from {listed(used, most=8)}"
    more = f", and so on for {listed((names[k] for k in lost[1:]), most=6)}" if len(lost) > 1 else ""
    return InputError(
        f"the columns of the model are linearly dependent: {reason}{more}",
        f"Drop {listed((f'‘{names[k]}’' for k in lost), most=12)}, or the terms that they come from.",
    )


def _check_text(parsed: Parsed, frame: pd.DataFrame, kept: npt.NDArray[np.int64]) -> None:
    """The response must be numbers; a predictor of text that looks like numbers is not made a factor."""
    import pandas as pd

    for name in parsed.made_of:
        if not pd.api.types.is_numeric_dtype(frame[name].dtype):
            raise text_error(frame[name], kept)
    for name in parsed.predictors:
        dtype = frame[name].dtype
        if pd.api.types.is_datetime64_any_dtype(dtype) or dtype.kind == "m":
            raise InputError(
                f"{name} is a time, not a number or a factor", "Make a column of numbers of it first."
            )
        if name not in parsed.declared and mostly_numbers(frame[name]):
            raise text_error(
                frame[name],
                kept,
                f"Mend these values, or leave them empty if they are missing. If {name} is a "
                f"factor, write C({name}).",
            )


def _factors(parsed: Parsed, frame: pd.DataFrame) -> pd.DataFrame:
    """Columns used as they are: text and true/false as categories in a fixed order."""
    import pandas as pd

    made = {}
    for name in dict.fromkeys([*parsed.made_of, *parsed.predictors]):
        column = frame[name]
        if name in parsed.made_of or isinstance(column.dtype, pd.CategoricalDtype):
            made[name] = column.astype(float) if name in parsed.made_of else column
        elif pd.api.types.is_bool_dtype(column.dtype) and not _only_lookup(name, parsed):
            made[name] = column.astype(float)
        elif pd.api.types.is_bool_dtype(column.dtype) or not pd.api.types.is_numeric_dtype(column.dtype):
            levels = sorted(column.unique(), key=lambda v: (str(type(v)), str(v)))
            made[name] = pd.Series(pd.Categorical(column, categories=pd.Index(levels, dtype=object)))
        else:
            made[name] = column
        if isinstance(made[name].dtype, pd.CategoricalDtype) and len(made[name].cat.categories) < 2:
            raise InputError(
                f"the factor {name} has one level (‘{made[name].cat.categories[0]}’) in all rows "
                "that are kept",
                f"Leave {name} out of the model.",
            )
    return pd.DataFrame(made)


def _only_lookup(name: str, parsed: Parsed) -> bool:
    """A column that the formula uses outside of any function."""
    inside = [
        t
        for term in parsed.formula.rhs
        for t in term.factors
        if t.eval_method.value == "python" and name in notation.variables(t.expr, "python", (name,))
    ]
    return name in parsed.lookups and not inside


def _check_size(parsed: Parsed, data: pd.DataFrame) -> None:
    """Ask before a design is formed that would not fit."""
    import pandas as pd

    wide = 0
    for term in parsed.formula.rhs:
        size = 1
        for f in term.factors:
            name = notation.short(f.expr)
            if name in data and (isinstance(data[name].dtype, pd.CategoricalDtype) or f.expr != name):
                size *= int(data[name].nunique())
        wide += size
    memory(8.0 * 3 * len(data) * wide, f"a design of {len(data):,} rows and about {wide:,} columns")


def _evaluation_error(
    parsed: Parsed, frame: pd.DataFrame, kept: npt.NDArray[np.int64], error: Exception
) -> InputError:
    import pandas as pd

    for name in parsed.predictors:
        if not pd.api.types.is_numeric_dtype(frame[name].dtype) and name not in parsed.lookups:
            return text_error(frame[name], kept)
    return InputError(
        f"the model cannot be worked out: {' '.join(str(error).split())}",
        "Check the functions and their arguments.",
    )


def _check_values(name: str, values: Array, kept: npt.NDArray[np.int64]) -> None:
    bad = np.flatnonzero(~np.isfinite(values))
    if len(bad):
        raise InputError(
            f"{name} has no finite value in {rows(kept[bad])} (a logarithm of 0 or less, or a "
            "division by 0?)",
            "Mend these values, or use another function.",
        )


def _named(spec: Any, data: pd.DataFrame) -> tuple[tuple[str, ...], tuple[TermBlock, ...]]:
    """Names of columns and terms in our own words."""
    labels = _labels(spec, data)
    names: list[str] = []
    terms: list[TermBlock] = []
    for part in spec.structure:
        factors = [f.expr for f in part.term.factors if f.expr != "1"]
        columns = tuple(range(len(names), len(names) + len(part.columns)))
        names.extend(notation.column_name(c, part.scoped_terms, labels) for c in part.columns)
        if not columns:
            continue
        used = [
            v
            for f in part.term.factors
            for v in notation.variables(f.expr, f.eval_method.value, [str(c) for c in data])
        ]
        terms.append(
            TermBlock(
                notation.term_name(factors), columns, _kind(factors, labels), tuple(dict.fromkeys(used))
            )
        )
    twice = sorted({n for n in names if names.count(n) > 1})
    if twice:
        raise InputError(f"the model has {quoted(twice)} more than once", "Leave out one of the terms.")
    return tuple(names), tuple(terms)


def _labels(spec: Any, data: pd.DataFrame) -> dict[str, dict[str, str]]:
    """Factor expression → level as the library prints it → level as we do."""
    import pandas as pd

    found: dict[str, dict[str, str]] = {}
    for expression in {f.expr for part in spec.structure for f in part.term.factors}:
        name = notation.short(expression)
        if name not in data or (name == expression and not isinstance(data[name].dtype, pd.CategoricalDtype)):
            continue
        found[expression] = {str(v): _level(v) for v in data[name].unique()}
    return found


def _level(value: Any) -> str:
    if isinstance(value, (float, np.floating)) and float(value).is_integer():
        return str(int(value))
    return str(value)


def _kind(factors: list[str], labels: Mapping[str, Any]) -> Kind:
    if not factors:
        return "constant"
    if len(factors) > 1:
        return "interaction"
    return "factor" if factors[0] in labels else "numeric"


def _covariates(parsed: Parsed, data: pd.DataFrame) -> dict[str, Array]:
    import pandas as pd

    return {
        name: data[name].to_numpy(dtype=float)
        for name in parsed.predictors
        if name not in parsed.declared and pd.api.types.is_numeric_dtype(data[name].dtype)
    }


def _levels(parsed: Parsed, data: pd.DataFrame) -> dict[str, tuple[Any, ...]]:
    import pandas as pd

    found: dict[str, tuple[Any, ...]] = {}
    for name in parsed.predictors:
        column = data[name]
        if isinstance(column.dtype, pd.CategoricalDtype):
            found[name] = tuple(column.cat.categories)
        elif name in parsed.declared:
            found[name] = tuple(sorted(column.unique()))
    return found


def _remarks(y: Array, response: str) -> tuple[str, ...]:
    distinct = np.unique(y[:10_000])
    if len(distinct) > MOST_COUNTS or len(distinct := np.unique(y)) > MOST_COUNTS:
        return ()
    if len(distinct) == 2:
        a, b = (f"{v:g}" for v in distinct)
        return (
            f"{response} takes two values only ({a} and {b}): a straight line for the chance of one of them "
            "is fitted here. That is not what this is made for: rows then differ in variance, and what "
            "looks like dependence may be a misfit. Compare with a logistic model.",
        )
    if len(distinct) > 2 and distinct[0] >= 0 and len(y) > MOST_COUNTS and _whole(distinct):
        return (
            f"{response} holds the whole numbers {distinct[0]:g} to {distinct[-1]:g} only, as counts and "
            "ratings do: the model is for a continuous response, and variances that grow with the mean are "
            "looked at but not modelled.",
        )
    return ()


def _whole(values: Array) -> bool:
    return bool(np.all(values == np.round(values)))


def _codes(parsed: Parsed, terms: tuple[TermBlock, ...], data: pd.DataFrame) -> tuple[str, ...]:
    """Numeric predictors that look like codes: three to five whole numbers in a row, from 0 or 1."""
    import pandas as pd

    notes = []
    for name in (t.name for t in terms if t.kind == "numeric"):
        if name not in data or name in parsed.declared or not pd.api.types.is_numeric_dtype(data[name].dtype):
            continue
        distinct = np.unique(data[name].to_numpy(dtype=float))
        low, high = distinct[0], distinct[-1]
        row = 3 <= len(distinct) <= MOST_CODES and low in (0, 1) and high - low == len(distinct) - 1
        if row and _whole(distinct) and len(data) >= 4 * len(distinct):
            notes.append(
                f"{name} holds the whole numbers {low:g} to {high:g} and is used as a number; "
                f"C({name}) makes it a factor."
            )
    return tuple(notes)
