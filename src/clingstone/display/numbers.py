"""Numbers as people read them: digits that follow uncertainty, a true minus, shares, p-values."""

from __future__ import annotations

import math
import re

MINUS = "−"
NBSP = "\u00a0"
MISSING = "—"

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


def decimals_for(se: float, significant: int = 2) -> int:
    """Decimals such that ``significant`` digits of a standard error are shown; may be negative.

    Digits follow uncertainty: two significant digits of the standard error decide those of the
    estimate. A standard error that is zero or not finite decides nothing, and 2 is returned.
    """
    if not math.isfinite(se) or se <= 0:
        return 2
    # Rounding may carry into the next decade: 0.0996 to two digits is 0.10.
    lead = int(f"{se:.{significant - 1}e}".split("e")[1])
    return significant - 1 - lead


def number(value: float, decimals: int, *, grouped: bool = True) -> str:
    """A number with a true minus sign and ``decimals`` (negative: rounded to tens …).

    Thousands are grouped by commas, on the axis of a figure (``grouped=False``) only from 10,000 on,
    because what stands there may be years.
    """
    if math.isnan(value):
        return MISSING
    if math.isinf(value):
        return "∞" if value > 0 else f"{MINUS}∞"
    rounded = round(value, decimals)
    if rounded != 0 and (decimals > 6 or abs(rounded) >= 1e9):
        return _scientific(value, max(1, decimals + 1 + math.floor(math.log10(abs(rounded)))))
    body = f"{abs(rounded):,.{max(0, decimals)}f}"
    if not grouped and abs(rounded) < 10_000:
        body = body.replace(",", "")
    return (MINUS if rounded < 0 else "") + body


def significant(value: float, digits: int = 2) -> str:
    """A number to so many significant digits; powers of ten where zeros would have to be counted."""
    if not math.isfinite(value) or value == 0:
        return number(value, 0)
    if not 1e-4 <= abs(value) < 1e7:
        return _scientific(value, digits)
    return number(value, decimals_for(abs(value), digits))


def amount(value: float) -> str:
    """A measured amount as it is, up to four digits and whole above: "14", "7.192", "12,346"."""
    if not math.isfinite(value) or (value == round(value) and abs(value) < 1e7):
        return number(value, 0)
    text = significant(value, max(4, 1 + math.floor(math.log10(abs(value)))) if abs(value) < 1e7 else 4)
    return text if "×" in text or "." not in text else text.rstrip("0").rstrip(".")


_LONG = re.compile(r"(?<![\w.,])[-−]?(?:\d+\.\d+(?:e[+-]?\d+)?|\d+e[+-]?\d+)(?!\w|[.,]\d)")
SHOWN = 4  # digits of a measured amount in running text


def shortened(text: str) -> str:
    """Words in which every decimal figure of more than four digits is cut to four, with a true minus, and
    a per cent sign stands apart.

    What was saved keeps all its digits; this is for reading.
    """

    def short(match: re.Match[str]) -> str:
        raw = match.group()
        digits = re.sub(r"\D", "", raw.partition("e")[0]).lstrip("0")
        if len(digits) <= SHOWN and "e" not in raw:
            return raw.replace("-", MINUS)
        value = float(raw.replace(MINUS, "-"))
        return significant(value, min(SHOWN, max(1, len(digits)))) if "e" in raw else amount(value)

    return re.sub(r"(?<=\d) ?%", f"{NBSP}%", _LONG.sub(short, text))


def _scientific(value: float, digits: int) -> str:
    mantissa, power = f"{abs(value):.{max(0, digits - 1)}e}".split("e")
    sign = MINUS if value < 0 else ""
    return f"{sign}{mantissa}{NBSP}×{NBSP}10{superscript(int(power))}"


def superscript(value: int) -> str:
    return str(value).translate(_SUPERSCRIPT)


def span(low: float, high: float, decimals: int) -> str:
    """A range in figures: "−6.4 to 0.2"."""
    return f"{number(low, decimals)} to {number(high, decimals)}"


def bounds(low: float, high: float, decimals: int = 2) -> str:
    """An interval behind its estimate, " (0.06 to 0.41)"; "" when an end is not known."""
    return "" if math.isnan(low) or math.isnan(high) else f" ({span(low, high, decimals)})"


def percent(share: float) -> str:
    """A share as "18 %": whole numbers, finer below 1 and above 99."""
    if not math.isfinite(share):
        return MISSING
    return f"{_hundredths(share)}{NBSP}%"


def percent_span(low: float, high: float) -> str:
    """A range of shares: "6 to 41 %"."""
    return f"{_hundredths(low)} to {_hundredths(high)}{NBSP}%"


def percent_bounds(low: float, high: float) -> str:
    """ " (6 to 41 %)", or "" when an end is not known."""
    return "" if math.isnan(low) or math.isnan(high) else f" ({percent_span(low, high)})"


def _hundredths(share: float) -> str:
    if not math.isfinite(share):
        return MISSING
    value = 100 * share
    size = abs(value)
    if size >= 0.995 and not 99 < size < 100:
        return number(value, 0)
    if 99 < size < 100:
        return "more than 99.9" if size > 99.95 else number(value, 1)
    if size < 0.005:
        return "0"
    return number(value, decimals_for(size, 1))


def p_value(p: float) -> str:
    """A p-value with its letter: "p = 0.003", "p = 4 × 10⁻⁵", "p < 10⁻⁶"."""
    if math.isnan(p):
        return "p not available"
    return f"p{NBSP}{p_figure(p, equals=True)}"


def p_figure(p: float, *, equals: bool = False) -> str:
    """The figure alone, for a table column headed p."""
    sign = f"={NBSP}" if equals else ""
    if math.isnan(p):
        return MISSING
    if p < 1e-6:
        return f"<{NBSP}10{superscript(-6)}"
    if p < 0.0005:
        return sign + _scientific(p, 1)
    if p < 0.0995:
        return sign + number(p, max(3, decimals_for(p, 1)))
    if p <= 0.99:
        return sign + number(p, 2)
    return f">{NBSP}0.99"


def times(factor: float) -> str:
    """How an interval changes: "2.3 times as wide"; a factor that shows as 1.0 is "about as wide"."""
    shown = significant(factor)
    return "about as wide" if shown == "1.0" else f"{shown} times as wide"


def degrees(df: float) -> str:
    """Degrees of freedom in figures: one decimal below 100, whole above; "∞" for a normal reference."""
    if not math.isfinite(df):
        return number(df, 0)
    return number(df, 0) if df == round(df) or df >= 100 else number(df, 1)


def freedom(df: float | None, df2: float | None = None) -> str:
    """In words: "1 degree of freedom", "11 and 396 degrees of freedom"."""
    if df is None:
        return "unknown degrees of freedom"
    if df2 is not None:
        return f"{degrees(df)} and {degrees(df2)} degrees of freedom"
    return f"{degrees(df)} degree{'' if df == 1 else 's'} of freedom"
