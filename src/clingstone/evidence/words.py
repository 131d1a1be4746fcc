"""Numbers inside sentences: few digits, a true minus sign, no codes."""

from __future__ import annotations

import math

MINUS = "−"


def number(value: float, digits: int = 2) -> str:
    """A number with so many significant digits: "0.18", "−3.1", "412"."""
    if not math.isfinite(value):
        return "not known" if math.isnan(value) else ("∞" if value > 0 else f"{MINUS}∞")
    if value == 0:
        return "0"
    power = int(f"{value:.{digits - 1}e}".split("e")[1])  # of the rounded number: 9.99e-5 is 1.0e-4
    place = digits - 1 - power
    text = f"{round(value, place):.{max(place, 0)}f}"
    return text.replace("-", MINUS)


def amount(value: float) -> str:
    """A measured amount as it is, up to four digits: "14", "7.192"."""
    return f"{value:,.4g}".replace("-", MINUS)


def listed(names: list[str]) -> str:
    """ "a", "a and b", "a, b and c"."""
    return names[0] if len(names) == 1 else f"{', '.join(names[:-1])} and {names[-1]}"


def correlation(value: float) -> str:
    """Two decimals, always: correlations and shares on −1 … 1."""
    return f"{value:.2f}".replace("-0.00", "0.00").replace("-", MINUS)


def percent(value: float) -> str:
    """A share in per cent without decimals ("18"), with one below 1 % ("0.4")."""
    share = 100 * value
    text = f"{share:.0f}" if abs(share) >= 1 or share == 0 else f"{share:.1f}"
    return text.replace("-0.0", "0").replace("-", MINUS)


def between(low: float, high: float, form: str = "correlation") -> str:
    """ "(0.06 to 0.41)", or nothing when the interval is not known."""
    if math.isnan(low) or math.isnan(high):
        return ""
    say = {"correlation": correlation, "percent": percent, "number": number}[form]
    unit = " %" if form == "percent" else ""
    return f" ({say(low)} to {say(high)}{unit})"


def p_value(p: float, log_p: float = float("nan")) -> str:
    """ "p = 0.031", "p = 0.0004", "p below 10⁻⁶"."""
    if math.isnan(p):
        return "p not known"
    if p < 1e-6:
        power = log_p / math.log(10) if math.isfinite(log_p) else (math.log10(p) if p > 0 else -308.0)
        digits = str(-math.ceil(power)).translate(str.maketrans("0123456789", "⁰¹²³⁴⁵⁶⁷⁸⁹"))
        return f"p below 10⁻{digits}"
    if p >= 0.995:
        return "p = 1.00"
    return f"p = {p:.2f}" if p >= 0.1 else f"p = {p:.3f}" if p >= 0.001 else f"p = {number(p, 1)}"


def counted(count: int, noun: str) -> str:
    """ "1 pair", "1,204 pairs"."""
    return f"{count:,} {noun}" if count == 1 else f"{count:,} {noun}s"


def degrees(df: float | None, df2: float | None = None) -> str:
    """ "1 degree of freedom", "11 and 396 degrees of freedom"; fractions with one decimal."""

    def say(value: float) -> str:
        return f"{value:,.0f}" if value == round(value) else f"{value:,.1f}"

    if df is None:
        return "unknown degrees of freedom"
    if df2 is None:
        return f"{say(df)} degree of freedom" if df == 1 else f"{say(df)} degrees of freedom"
    return f"{say(df)} and {say(df2)} degrees of freedom"
