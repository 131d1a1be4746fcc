"""All tests run, alone and given the other structures; p adjusted; verdicts; words."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from clingstone.covariance.fits import Fits
from clingstone.display import listed
from clingstone.evidence.finding import About, Curve, Evidence, Finding, Reading, Test, column
from clingstone.evidence.judge import VERDICTS, verdicts
from clingstone.evidence.nested import level_name
from clingstone.evidence.read import holm
from clingstone.evidence.registry import TESTS
from clingstone.maths.once import Array
from clingstone.needs import NotSupported, Refusal

ALONE: frozenset[str] = frozenset()


@dataclass(frozen=True, eq=False)
class Item:
    """One test at one place, alone or given other structures: its reading, or why there is none.

    curve, more : what figures draw of it, of a test read alone on one column of y.
    """

    test: Test
    about: About
    given: frozenset[str]
    reading: Reading | None
    refusal: Refusal | None = None
    curve: Curve | None = None
    more: tuple[Curve, ...] = ()

    @property
    def decides(self) -> bool:
        """Primary tests read alone enter Holm's adjustment and the verdict of their structure."""
        return self.test.primary and self.about.primary and not self.given and self.reading is not None


@dataclass(frozen=True, eq=False)
class Columns:
    """Tests read on B columns of y, without words.

    items : K of them. p, adjusted (K, B) : adjusted equals p where a test is not adjusted.
    verdict (K, B) : places in ``VERDICTS``.
    """

    items: tuple[Item, ...]
    p: Array
    adjusted: Array
    verdict: npt.NDArray[np.int8]


def gather(fits: Fits, tests: Sequence[Test] = TESTS) -> Evidence:
    """Every test that these data can carry, as Findings of column 0.

    Each is read alone and, where it knows how, given the other declared structures. Holm adjusts the
    primary tests over the structures, and the curve tests under dependence over the covariates; the
    others are exploratory and not adjusted. A refusal becomes a Finding ``not applicable``.
    """
    return told(read_columns(fits, tests, drawn=True), fits)


def told(columns: Columns, fits: Fits, b: int | None = None) -> Evidence:
    """What tests read on many columns say of one of them, as Findings.

    fits : of the one column. b : which it is, where the tests were read on others too; no sentences and
    no figures are made then, and a test that reads only one column at a time is read now.
    """
    if b is None:
        known = zip(columns.items, columns.p, columns.adjusted, columns.verdict, strict=True)
        return Evidence(tuple(_finding(fits, item, p, adjusted, code) for item, p, adjusted, code in known))
    out = []
    for i, item in enumerate(columns.items):
        p, adjusted, code, at = columns.p[i], columns.adjusted[i], columns.verdict[i], b
        if item.reading is None and item.test.needs.check(fits.design) is None:
            item = read_column(fits, item.test, item.about, item.given)
            p = adjusted = _p(item, 1)
            code, at = _codes(fits, item, p), 0
        out.append(_finding(fits, item, p, adjusted, code, at, words=False))
    return Evidence(tuple(out))


def read_columns(
    fits: Fits, tests: Sequence[Test] = TESTS, given: bool | None = None, *, drawn: bool = False
) -> Columns:
    """All tests on all B columns, without words.

    given : also read them given the other structures; by default only for a single column, because
    it fits the joint model to every column (seconds per hundred columns with three structures).
    """
    given = fits.response.B == 1 if given is None else given
    B = fits.response.B
    with fits.run.progress("tests", len(tests)) as advance:
        items: list[Item] = []
        for test in tests:
            items.extend(_items(fits, test, given, drawn and B == 1))
            advance(1)
    p = np.array([_p(item, B) for item in items]).reshape(len(items), B)
    adjusted = p.copy()
    for family in (
        [i for i, item in enumerate(items) if item.decides],
        [i for i, item in enumerate(items) if item.test.id == "functional-form" and item.given],
    ):
        if family:
            adjusted[family] = holm(p[family])
    verdict = np.array([_codes(fits, item, adjusted[i]) for i, item in enumerate(items)], dtype=np.int8)
    return Columns(tuple(items), p, adjusted, verdict.reshape(len(items), B))


def read_column(fits: Fits, test: Test, about: About, given: frozenset[str] = ALONE) -> Item:
    """One test at one place on all B columns; a refusal instead of an exception."""
    try:
        return Item(test, about, given, test.read(fits, about, given))
    except NotSupported as refused:
        return Item(test, about, given, None, Refusal(str(refused), refused.hint))


def _items(fits: Fits, test: Test, given: bool, drawn: bool) -> Iterable[Item]:
    design = fits.design
    if any(getattr(design, part) is None for part in test.needs.parts):
        return
    abouts = test.abouts(design)
    refusal = test.needs.check(design)
    if refusal is not None and abouts:
        yield Item(test, abouts[0], ALONE, None, refusal)
        return
    for about in abouts:
        item = read_column(fits, test, about)
        yield _drawn(fits, item) if drawn and item.reading is not None else item
        for others in test.givens(fits, about) if given else ():
            yield read_column(fits, test, about, others)


def _drawn(fits: Fits, item: Item) -> Item:
    try:
        curve = item.test.curve(fits, item.about)
    except NotSupported:
        curve = None
    return replace(item, curve=curve, more=item.test.more(fits, item.about))


def _p(item: Item, B: int) -> Array:
    return np.full(B, np.nan) if item.reading is None else np.asarray(np.broadcast_to(item.reading.p, B))


def _codes(fits: Fits, item: Item, p: Array) -> npt.NDArray[np.int8]:
    if item.reading is None:
        return np.zeros(fits.response.B, dtype=np.int8)
    return verdicts(fits, item.test, item.about, item.reading, p)


def _finding(
    fits: Fits,
    item: Item,
    p: Array,
    adjusted: Array,
    code: npt.NDArray[np.int8],
    b: int = 0,
    *,
    words: bool = True,
) -> Finding:
    test, about, reading = item.test, item.about, item.reading
    verdict = VERDICTS[int(code[b])]
    held = item.decides or (test.id == "functional-form" and bool(item.given))
    nothing = reading is not None and reading.flag is None and bool(np.isnan(p[b]))
    shown = reading or Reading(statistic=np.array([np.nan]), p=np.array([np.nan]))
    return Finding(
        structure=test.family,
        test=test.id,
        about=about.key,
        about_words=about.words,
        statistic=column(shown.statistic, b),
        statistic_name=shown.statistic_name,
        df=shown.df,
        df2=shown.df2,
        alternative=test.alternative,
        p=column(shown.p, b),
        p_method=shown.p_method,
        p_adjusted=float(adjusted[b]) if held and not np.isnan(p[b]) else None,
        estimate=column(shown.estimate, b),
        estimate_name=shown.estimate_name,
        low=column(shown.low, b),
        high=column(shown.high, b),
        n_used=shown.n_used,
        verdict=verdict,
        caveats=shown.caveats,
        sentence=_sentence(fits, item, nothing) if words else "",
        source=test.source,
        null=test.null,
        given=tuple(sorted(item.given)),
        primary=test.primary and about.primary and not item.given,
        curve=item.curve,
        rows=shown.rows,
        more=item.more,
    )


def _sentence(fits: Fits, item: Item, nothing: bool) -> str:
    if item.refusal is not None:
        reason = item.refusal.reason
        words = f"Not tested ({item.about.words or item.test.id}): {reason}."
        return f"{words} {item.refusal.hint}".strip()
    if nothing:
        return "The model leaves nothing over (or nothing that varies), so there is nothing to test."
    assert item.reading is not None
    said = item.test.sentence(item.reading, item.about)
    if not item.given:
        return said
    names = listed(_label(fits, key) for key in sorted(item.given, key=_reading_order))
    return f"With {names} taken into account, {said[:1].lower()}{said[1:]}"


def _reading_order(key: str) -> tuple[int, str]:
    return ("group", "serial", "spatial").index(key.partition(":")[0]), key


def _label(fits: Fits, key: str) -> str:
    family, _, level = key.partition(":")
    if family == "group":
        groups = fits.design.group
        return level_name(level) if groups is None else groups.title(level)
    return {"serial": "order in time", "spatial": "place"}[family]
