"""How a fitted error model explains itself: its parameters, in the words of an Account."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from clingstone.covariance.components import Component
from clingstone.covariance.profile import Varying, followed, varying
from clingstone.display import MINUS, listed, number, significant
from clingstone.remedies.remedy import Account

if TYPE_CHECKING:
    from clingstone.covariance.algebras import Chosen
    from clingstone.covariance.fits import ErrorModel
    from clingstone.design.response import Response

_SHAPES = {
    "serial.rho": "ρ per step",
    "spatial.range": "practical range (correlation 0.05)",
}
_DF_SOURCE = {
    "Kenward–Roger": "kenward-roger-1997",
    "Satterthwaite": "satterthwaite-1946, giesbrecht-burns-1985, fai-cornelius-1996",
}
_COVARIANCE = {
    "Kenward–Roger": "σ²(X′V⁻¹X)⁻¹, adjusted for the estimation of the variances (Kenward–Roger)",
}


def gls_account(
    estimation: str, rule: str, components: tuple[Component, ...], model: ErrorModel, unit: str
) -> Account:
    """Estimator, covariance, factor, df rule and every error parameter of a GLS fit; unit : of the map."""
    parts = " and ".join(_part(c) for c in components)
    variances = {key: float(v[0]) for key, v in model.variances.items()}
    # An AR(1) process is the row noise itself: what it shares with its neighbours and the rest are one.
    # Where rows of one time are repeats, it stands beside the row noise.
    itself = {c.key for c in components if c.key == "serial" and not c.repeats}
    noise = "the autoregressive errors" if itself else "row noise"
    shown = {c.label: variances[c.key] for c in components if c.key not in itself}
    shown[noise] = variances["row"] + sum(variances[key] for key in itself)
    total = sum(shown.values())
    items = [(f"variance of {label}", significant(value, 4)) for label, value in shown.items()]
    levels = [c.label for c in components if c.family == "group"]
    items += [(f"intraclass correlation of {name}", number(shown[name] / total, 3)) for name in levels]
    known = [key for key in _SHAPES if key in model.shape]
    for key in known:
        value = float(model.shape[key][0])
        of = f" {unit}" if key == "spatial.range" and np.isfinite(value) else ""
        items.append((_SHAPES[key], significant(value, 4) + of))
    if bool(model.at_bound.any()):
        named = [n for n, at in zip(model.names, model.at_bound[:, 0], strict=True) if at]
        items.append(("at the end of its range", ", ".join(named)))
    sources = ["patterson-thompson-1971", "harville-1977"] if estimation == "REML" else ["harville-1977"]
    if rule in _DF_SOURCE:
        sources.append(_DF_SOURCE[rule])
    how = "restricted maximum likelihood" if estimation == "REML" else "maximum likelihood"
    return Account(
        estimator=f"generalised least squares, error parameters by {how}: {parts}",
        covariance=_COVARIANCE.get(rule, "σ²(X′V⁻¹X)⁻¹"),
        factor="σ² = e′V⁻¹e/(n − p)" if estimation == "REML" else "σ² = e′V⁻¹e/n",
        df_rule=rule,
        reference="normal" if rule == "normal quantile" else "t",
        items=tuple(items),
        source=", ".join(sources),
    )


def profiled(
    algebra: Chosen, response: Response, model: ErrorModel, confidence: float
) -> list[tuple[str, str]]:
    """What varies between groups, as standard deviations and correlations with their profile intervals."""
    found = varying(algebra, response, model, confidence)
    items = [_item(one, algebra, confidence) for one in found if np.isfinite(one.estimate)]
    if not followed(algebra, response):
        groups = max(algebra.bundle(key).part.count for key in algebra.level_keys)
        why = (
            f"not worked out: they take hundreds of evaluations of the likelihood, and each runs over all "
            f"{groups:,} groups"
        )
        items.append(("profile intervals of what varies", why))
    return items


def _item(one: Varying, algebra: Chosen, confidence: float) -> tuple[str, str]:
    """A standard deviation or correlation in words, its value, and its profile interval if there is one."""
    value = (f"{one.estimate:.6g}" if len(one.names) == 1 else f"{one.estimate:.3f}").replace("-", MINUS)
    if np.isfinite(one.low) and np.isfinite(one.high):
        ends = f"{significant(one.low, 3)} to {significant(one.high, 3)}"
        value += f" ({100 * confidence:g} % profile interval {ends})"
    if one.level == "row":
        return "standard deviation of row noise", value
    if len(one.names) == 2:
        first, second = (name or "intercept" for name in one.names)
        return f"correlation of {first} and {second} between {one.level}", value
    (name,) = one.names
    slopes = [x for x in algebra.bundle(one.level).names if x]
    what = f"slope of {name}" if name else "intercept" + (f" (at {listed(slopes)} = 0)" if slopes else "")
    return f"standard deviation of the {what} between {one.level}", value


def _part(component: Component) -> str:
    if component.family == "group":
        return f"a random intercept of {component.label}"
    if component.key == "serial" and component.repeats:
        return f"errors that fade over {component.label} beside row noise, rows of one time being repeats"
    if component.key == "serial":
        return f"AR(1) over {component.label}"
    if component.key == "spatial":
        return "exponential correlation over place with a nugget"
    return f"a random intercept of each {component.part}"


def bound_notes(components: tuple[Component, ...], model: ErrorModel) -> tuple[str, ...]:
    """A sentence per parameter of one column of y that was estimated at the end of its range."""
    out = []
    label = {c.key: c.label for c in components}
    for name, at in zip(model.names, model.at_bound[:, 0], strict=True):
        key, what = name.rsplit(".", 1)
        if not at:
            continue
        gone = float(model.variances[key][0]) <= 0
        if what == "log_ratio" and gone:
            out.append(
                f"The variance of {label[key]} was estimated at zero, so the fit is the one without it."
            )
        elif what == "log_ratio":
            out.append(f"No row noise is left beside {label[key]}: its share was estimated at the whole.")
        elif what == "log_range" and not gone:
            out.append(
                "The range was estimated at the end of what these places can show: shorter than the gaps "
                "between them, or longer than the map."
            )
        elif key == "serial":
            out.append(_serial_note(float(model.shape["serial.rho"][0])))
    return tuple(out)


def _serial_note(rho: float) -> str:
    if abs(rho) > 0.99:
        return (
            f"The correlation along time was estimated at {number(rho, 4)}, which cannot be told from a "
            "random walk; consider a model of the changes from one step to the next."
        )
    return f"The correlation along time was estimated at the end of its range ({number(rho, 3)} per step)."
