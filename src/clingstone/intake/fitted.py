"""A fitted ordinary or weighted regression: which rows it used, its columns, its weights."""

from __future__ import annotations

import re
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from clingstone.display import count, quoted, rows
from clingstone.intake import formula as notation
from clingstone.intake import model as modelling
from clingstone.intake.columns import plain
from clingstone.intake.frames import Table, table
from clingstone.intake.model import Blocks, Kind, TermBlock
from clingstone.maths.once import Array
from clingstone.needs import InputError

if TYPE_CHECKING:
    import pandas as pd

AGREE = 1e-6  # relative agreement asked of values that were worked out twice
_PART = re.compile(r"(?P<base>.*?)\[(?:T\.|S\.)?(?P<level>.*)\]", re.DOTALL)


@dataclass(frozen=True, eq=False)
class Fitted:
    """What a fitted model tells.

    table : the frame it goes with. places : (n,) positions of its rows in that table. weights :
    (n,) precision weights, or None. columns : data columns of response and predictors, as far as
    the formula tells.
    """

    table: Table
    places: npt.NDArray[np.int64]
    blocks: Blocks
    weights: Array | None
    columns: tuple[str, ...]
    notes: tuple[str, ...]


def is_fit(data: Any) -> bool:
    """Whether this is the result of a fit rather than data."""
    fitted = any(hasattr(data, name) for name in ("fittedvalues", "fitted_values"))
    return fitted and all(hasattr(data, name) for name in ("model", "params")) and hasattr(data.model, "exog")


@dataclass(frozen=True, eq=False)
class Held:
    """What an ordinary fit holds, whatever the library.

    labels : of its n rows, or None. missing : positions in ``own`` of rows that were left out. own : the
    frame that it was made from, or what is left of it.
    """

    y: Array
    X: Array
    names: tuple[str, ...]
    response: str
    params: Array
    formula: str | None
    weights: Array | None
    labels: pd.Index | None
    missing: tuple[int, ...]
    own: pd.DataFrame


def recover(result: Any, data: Any = None) -> Fitted:
    """Rows, columns and weights of an ordinary or weighted fit of statsmodels or linearmodels.

    Parameters
    ----------
    result : of a formula or of arrays. data : the frame with ids, times, places; the frame of the
        fit is used where none is given, or, of linearmodels, its columns with entity and time.

    Raises
    ------
    InputError : another kind of model; rows that cannot be found in the data by their labels;
        response or columns that do not give the coefficients of the fit.
    """
    fit = _linearmodels(result) if _module(result).startswith("linearmodels") else _statsmodels(result)
    found = table(fit.own if data is None else data)
    places, notes = _places(fit, found, own=data is None)
    weights = None if fit.weights is None or np.all(fit.weights == 1) else fit.weights
    blocks, columns, more = _blocks(fit, found, places)
    modelling.checked(blocks, None if weights is None else np.sqrt(weights))
    _check_coefficients(fit, weights)
    return Fitted(found, places, blocks, weights, columns, (*notes, *more))


def _module(result: Any) -> str:
    return type(result.model).__module__


def _statsmodels(result: Any) -> Held:
    """An OLS or WLS result."""
    import pandas as pd

    fit = result.model
    kind = type(fit).__name__
    if kind not in ("OLS", "WLS"):
        raise InputError(
            f"a fitted {kind} was given, and only ordinary (OLS) and weighted (WLS) regressions are taken up",
            "Fit the same model by OLS or WLS, or give the data and the formula.",
        )
    if getattr(fit, "exog", None) is None or getattr(fit, "endog", None) is None:
        raise InputError(
            "the fitted model no longer holds its data", "Fit it again without removing the data."
        )
    own = getattr(fit.data, "frame", None)
    if own is None:
        given = fit.data.orig_exog
        frame = isinstance(given, pd.DataFrame)
        own = given if frame else pd.DataFrame(np.asarray(fit.exog), columns=list(fit.exog_names))
    missing = getattr(fit.data, "missing_row_idx", None)
    formula = getattr(fit, "formula", None)
    y = np.asarray(fit.endog, dtype=float)
    weights = np.asarray(fit.weights, dtype=float) if kind == "WLS" else None
    return Held(
        y=y,
        X=np.asarray(fit.exog, dtype=float),
        names=tuple(str(n) for n in fit.exog_names),
        response=str(fit.endog_names),
        params=np.asarray(result.params, dtype=float),
        formula=formula if isinstance(formula, str) else None,
        weights=None if weights is None else np.broadcast_to(weights, y.shape).copy(),
        labels=fit.data.row_labels,
        missing=() if missing is None else tuple(int(i) for i in missing),
        own=own,
    )


def _linearmodels(result: Any) -> Held:
    """A pooled panel regression, one without effects, or an instrumental one without instruments."""
    fit = result.model
    kind = type(fit).__name__
    panel = _module(result).startswith("linearmodels.panel")
    if panel and any(getattr(fit, f"{which}_effects", False) for which in ("entity", "time", "other")):
        raise InputError(
            f"a {kind} with effects was given, and its coefficients are those of columns from which group "
            "means were taken",
            "Give the data and the formula without the effects, and declare their column with group=: the "
            "refit ‘fixed-effects’ takes the means out, beside the others.",
        )
    ordinary = kind in ("PooledOLS", "PanelOLS") if panel else _without_instruments(fit)
    if not ordinary:
        raise InputError(
            f"a fitted {kind} was given, and of linearmodels only regressions that least squares fits to the "
            "rows as they are (PooledOLS, PanelOLS without effects) are taken up",
            "Fit the same model by PooledOLS, or give the data and the formula.",
        )
    y, X = (part.dataframe if panel else part.pandas for part in (fit.dependent, fit.exog))
    weights = np.asarray(fit.weights.values2d if panel else fit.weights.ndarray, dtype=float).ravel()
    text = fit.formula
    if isinstance(text, str) and "Intercept" not in X.columns:  # there, a constant has to be asked for
        text = text.replace("~", "~ 0 +", 1)
    own = X.join(y) if not set(X.columns) & set(y.columns) else X
    return Held(
        y=y.to_numpy(dtype=float)[:, 0],
        X=X.to_numpy(dtype=float),
        names=tuple(str(n) for n in X.columns),
        response=str(y.columns[0]),
        params=result.params.to_numpy(dtype=float),
        formula=text if isinstance(text, str) else None,
        weights=weights,
        labels=y.index,
        missing=(),
        own=own,
    )


def _without_instruments(fit: Any) -> bool:
    """Whether an instrumental regression has none, which makes it an ordinary one."""
    parts = [getattr(fit, name, None) for name in ("endog", "instruments")]
    return all(part is not None and part.shape[1] == 0 for part in parts)


def _places(fit: Held, found: Table, own: bool) -> tuple[npt.NDArray[np.int64], list[str]]:
    """Positions of the rows of a fit, by label; by number only where the arrays had no labels."""
    labels, used, gone = fit.labels, len(fit.y), list(fit.missing)
    if (own or labels is None) and found.rows == used + len(gone):
        note = (
            []
            if own
            else ["The fit was made from arrays without row labels; rows are matched by their number."]
        )
        return np.setdiff1d(np.arange(found.rows), gone), note
    if own and found.rows == used:
        return np.arange(used), []
    index = _index(found, labels)
    if labels is None or index is None:
        raise InputError(
            f"the fit used {count(used, 'row')} without labels and the data have {found.rows:,}: "
            "which rows were used cannot be known",
            "Fit from a data frame (its index tells the rows), or give the data and the formula.",
        )
    if not index.is_unique:
        twice = list(dict.fromkeys(index[index.duplicated()]))
        raise InputError(
            f"row labels of the data occur more than once ({quoted(twice)}), so the rows of the "
            "fit cannot be found",
            "Reset the index, fit again, and give both.",
        )
    places = index.get_indexer(labels)
    lost = np.flatnonzero(places < 0)
    if len(lost):
        raise InputError(
            f"{count(len(lost), 'row')} of the fit, such as the one labelled ‘{labels[lost[0]]}’, "
            f"{'is' if len(lost) == 1 else 'are'} not in the data that were given",
            "Give the frame that the model was fitted to.",
        )
    return np.asarray(places, dtype=np.int64), []


def _index(found: Table, labels: pd.Index | None) -> pd.Index | None:
    """Row labels of the data: its index, or the columns that bear the names of a fit's labels."""
    import pandas as pd

    names = [] if labels is None else [str(name) for name in labels.names]
    if len(names) < 2 or not all(name in found for name in names):
        return found.index
    return pd.MultiIndex.from_arrays([found.fetch(name) for name in names], names=names)


def _blocks(
    fit: Held, found: Table, places: npt.NDArray[np.int64]
) -> tuple[Blocks, tuple[str, ...], list[str]]:
    """Blocks with our names: from the formula where it gives the same columns, else from the arrays."""
    text, y, X = fit.formula, fit.y, fit.X
    if text is None:
        _check_same(found, places, dict(zip(fit.names, X.T, strict=True)) | {fit.response: y})
        return _from_arrays(fit, "", ""), (), []
    try:
        parsed = notation.parse(text, found.names)
        columns = tuple(dict.fromkeys([*parsed.made_of, *parsed.predictors]))
        frame = _frame(found, places, columns)
        again = modelling.blocks(parsed, frame, places)
    except InputError as error:
        note = (
            f"The formula of the fit cannot be worked out here ({error}); its columns are taken as they are."
        )
        return _from_arrays(fit, text, ""), (), [note]
    _agree(again.y, y, f"the response {parsed.response}", places)
    match = [_equal_column(again.X, X[:, j]) for j in range(X.shape[1])]
    if again.X.shape == X.shape and sorted(m for m in match if m is not None) == list(range(X.shape[1])):
        return again, columns, []
    rest = X - again.X @ np.linalg.lstsq(again.X, X, rcond=None)[0]
    if np.linalg.norm(rest) > AGREE * np.linalg.norm(X):
        off = [fit.names[j] for j in range(X.shape[1]) if match[j] is None]
        raise InputError(
            f"the data that were given do not reproduce the model's columns ({quoted(off)})",
            "Give the frame that the model was fitted to, unchanged.",
        )
    note = "The fit codes a factor in its own way; its columns are taken as they are."
    return _from_arrays(fit, text, parsed.transformed), columns, [note]


def _frame(found: Table, places: npt.NDArray[np.int64], columns: tuple[str, ...]) -> pd.DataFrame:
    import pandas as pd

    part = found.take(places)
    frame = pd.DataFrame({c: plain(part.column(c, "model of the fit")) for c in columns})
    for c in columns:
        if frame[c].isna().any():
            raise InputError(f"{c} is missing in rows that the fit used", "Give the frame that was fitted.")
    return frame


def _equal_column(X: Array, column: Array) -> int | None:
    scale = float(np.abs(column).max()) or 1.0
    same = np.flatnonzero(np.abs(X - column[:, None]).max(axis=0) <= AGREE * scale)
    return int(same[0]) if len(same) else None


def _agree(ours: Array, theirs: Array, what: str, places: npt.NDArray[np.int64]) -> None:
    off = np.flatnonzero(np.abs(ours - theirs) > AGREE * max(float(np.abs(theirs).max()), 1e-300))
    if len(off):
        raise InputError(
            f"{what} of the data is not that of the fit in {rows(places[off])}",
            "Give the frame that the model was fitted to, unchanged.",
        )


def _check_same(found: Table, places: npt.NDArray[np.int64], columns: dict[str, Array]) -> None:
    """Columns of the data that bear the name of one of the fit must hold the same values."""
    import pandas as pd

    part = found.take(places)
    for name, values in columns.items():
        if name not in found.names:
            continue
        held = plain(part.fetch(name))
        if pd.api.types.is_numeric_dtype(held.dtype):
            _agree(held.to_numpy(dtype=float), values, f"the column {name}", places)


def _check_coefficients(fit: Held, weights: Array | None) -> None:
    """The fit must be the least-squares fit of its own y and X."""
    y, X, theirs = fit.y, fit.X, fit.params
    root = np.ones(len(y)) if weights is None else np.sqrt(weights)
    ours = np.asarray(np.linalg.lstsq(X * root[:, None], y * root, rcond=None)[0], dtype=float)
    gap = float(np.linalg.norm(X @ (ours - theirs)))
    if not gap <= AGREE * max(float(np.linalg.norm(y)), 1e-300):
        raise InputError(
            "least squares on the model's own columns does not give its coefficients "
            f"({_first_gap(fit, ours)})",
            "Give an ordinary fit (not a regularised or constrained one), or the data and the formula.",
        )


def _first_gap(fit: Held, ours: Array) -> str:
    j = int(np.argmax(np.abs(ours - fit.params)))
    return f"{fit.names[j]}: {fit.params[j]:.6g} in the fit, {ours[j]:.6g} from its columns"


def _from_arrays(fit: Held, text: str, transformed: str) -> Blocks:
    """Blocks from bare columns, each column (or each factor, by its name) a term."""
    y, X = fit.y, fit.X
    names: list[str] = []
    places: dict[str, list[int]] = {}
    kinds: dict[str, Kind] = {}
    for j, given in enumerate(fit.names):
        name, term, kind = _words(given, X[:, j])
        names.append(name)
        places.setdefault(term, []).append(j)
        kinds.setdefault(term, kind)
    return Blocks(
        y=y,
        X=X,
        names=tuple(names),
        terms=tuple(
            TermBlock(t, tuple(js), kinds[t], tuple(t.split(notation.TIMES))) for t, js in places.items()
        ),
        response=fit.response,
        formula=text,
        transformed=transformed,
        covariates={t: X[:, js[0]] for t, js in places.items() if kinds[t] == "numeric" and len(js) == 1},
    )


def _words(given: str, column: Array) -> tuple[str, str, Kind]:
    """A column's name, its term's name and kind, from a name such as "dose:C(arm)[T.high]"."""
    if np.all(column == column[0]):
        return "constant", "constant", "constant"
    parts = re.split(r":(?![^\[\]]*\])", given)
    names, bases, factors = [], [], 0
    for part in parts:
        hit = _PART.fullmatch(part)
        base = notation.short(hit["base"] if hit else part)
        bases.append(base)
        factors += hit is not None
        names.append(f"{base}: {hit['level']}" if hit else base)
    kind: Kind = "interaction" if len(parts) > 1 else "factor" if factors else "numeric"
    return notation.TIMES.join(names), notation.TIMES.join(bases), kind
