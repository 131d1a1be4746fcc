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
    return all(hasattr(data, name) for name in ("model", "params", "fittedvalues")) and hasattr(
        data.model, "exog"
    )


def recover(result: Any, data: Any = None) -> Fitted:
    """Rows, columns and weights of a statsmodels OLS or WLS result.

    Parameters
    ----------
    result : of a formula or of arrays. data : the frame with ids, times, places; for a formula the
        frame of the fit is used where none is given.

    Raises
    ------
    InputError : another kind of model; rows that cannot be found in the data by their labels;
        response or columns that do not give the coefficients of the fit.
    """
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
    found = table(data if data is not None else own if own is not None else _array_frame(fit))
    places, notes = _places(fit, found, own=data is None)
    weights = np.asarray(fit.weights, dtype=float) if kind == "WLS" else None
    weights = (
        None if weights is None or np.all(weights == 1) else np.broadcast_to(weights, (len(places),)).copy()
    )
    y, X = np.asarray(fit.endog, dtype=float), np.asarray(fit.exog, dtype=float)
    blocks, columns, more = _blocks(fit, found, places, y, X)
    modelling.checked(blocks, None if weights is None else np.sqrt(weights))
    _check_coefficients(result, y, X, weights)
    return Fitted(found, places, blocks, weights, columns, (*notes, *more))


def _array_frame(fit: Any) -> pd.DataFrame:
    import pandas as pd

    exog = fit.data.orig_exog
    if isinstance(exog, pd.DataFrame):
        return exog
    return pd.DataFrame(np.asarray(fit.exog), columns=list(fit.exog_names))


def _places(fit: Any, found: Table, own: bool) -> tuple[npt.NDArray[np.int64], list[str]]:
    """Positions of the rows of a fit, by label; by number only where the arrays had no labels."""
    labels = fit.data.row_labels
    used = len(fit.endog)
    missing = getattr(fit.data, "missing_row_idx", None)
    gone = [] if missing is None else list(missing)
    if (own or labels is None) and found.rows == used + len(gone):
        note = (
            []
            if own
            else ["The fit was made from arrays without row labels; rows are matched by their number."]
        )
        return np.setdiff1d(np.arange(found.rows), gone), note
    if own and found.rows == used:
        return np.arange(used), []
    if labels is None or found.index is None:
        raise InputError(
            f"the fit used {count(used, 'row')} without labels and the data have {found.rows:,}: "
            "which rows were used cannot be known",
            "Fit from a data frame (its index tells the rows), or give the data and the formula.",
        )
    if not found.index.is_unique:
        twice = list(dict.fromkeys(found.index[found.index.duplicated()]))
        raise InputError(
            f"row labels of the data occur more than once ({quoted(twice)}), so the rows of the "
            "fit cannot be found",
            "Reset the index, fit again, and give both.",
        )
    places = found.index.get_indexer(labels)
    lost = np.flatnonzero(places < 0)
    if len(lost):
        raise InputError(
            f"{count(len(lost), 'row')} of the fit, such as the one labelled ‘{labels[lost[0]]}’, "
            f"{'is' if len(lost) == 1 else 'are'} not in the data that were given",
            "Give the frame that the model was fitted to.",
        )
    return np.asarray(places, dtype=np.int64), []


def _blocks(
    fit: Any, found: Table, places: npt.NDArray[np.int64], y: Array, X: Array
) -> tuple[Blocks, tuple[str, ...], list[str]]:
    """Blocks with our names: from the formula where it gives the same columns, else from the arrays."""
    text = getattr(fit, "formula", None)
    if not isinstance(text, str):
        _check_same(found, places, dict(zip(fit.exog_names, X.T, strict=True)) | {fit.endog_names: y})
        return _from_arrays(fit, y, X, "", ""), (), []
    try:
        parsed = notation.parse(text, found.names)
        columns = tuple(dict.fromkeys([*parsed.made_of, *parsed.predictors]))
        frame = _frame(found, places, columns)
        again = modelling.blocks(parsed, frame, places)
    except InputError as error:
        note = (
            f"The formula of the fit cannot be worked out here ({error}); its columns are taken as they are."
        )
        return _from_arrays(fit, y, X, text, ""), (), [note]
    _agree(again.y, y, f"the response {parsed.response}", places)
    match = [_equal_column(again.X, X[:, j]) for j in range(X.shape[1])]
    if again.X.shape == X.shape and sorted(m for m in match if m is not None) == list(range(X.shape[1])):
        return again, columns, []
    rest = X - again.X @ np.linalg.lstsq(again.X, X, rcond=None)[0]
    if np.linalg.norm(rest) > AGREE * np.linalg.norm(X):
        off = [fit.exog_names[j] for j in range(X.shape[1]) if match[j] is None]
        raise InputError(
            f"the data that were given do not reproduce the model's columns ({quoted(off)})",
            "Give the frame that the model was fitted to, unchanged.",
        )
    note = "The fit codes a factor in its own way; its columns are taken as they are."
    return _from_arrays(fit, y, X, text, parsed.transformed), columns, [note]


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


def _check_coefficients(result: Any, y: Array, X: Array, weights: Array | None) -> None:
    """The fit must be the least-squares fit of its own y and X."""
    root = np.ones(len(y)) if weights is None else np.sqrt(weights)
    ours = np.asarray(np.linalg.lstsq(X * root[:, None], y * root, rcond=None)[0], dtype=float)
    theirs = np.asarray(result.params, dtype=float)
    gap = float(np.linalg.norm(X @ (ours - theirs)))
    if not gap <= AGREE * max(float(np.linalg.norm(y)), 1e-300):
        raise InputError(
            "least squares on the model's own columns does not give its coefficients "
            f"({_first_gap(result, ours, theirs)})",
            "Give an ordinary fit (not a regularised or constrained one), or the data and the formula.",
        )


def _first_gap(result: Any, ours: Array, theirs: Array) -> str:
    j = int(np.argmax(np.abs(ours - theirs)))
    return f"{result.model.exog_names[j]}: {theirs[j]:.6g} in the fit, {ours[j]:.6g} from its columns"


def _from_arrays(fit: Any, y: Array, X: Array, text: str, transformed: str) -> Blocks:
    """Blocks from bare columns, each column (or each factor, by its name) a term."""
    names: list[str] = []
    places: dict[str, list[int]] = {}
    kinds: dict[str, Kind] = {}
    for j, given in enumerate(fit.exog_names):
        name, term, kind = _words(str(given), X[:, j])
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
        response=str(fit.endog_names),
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
