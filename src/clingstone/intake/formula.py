"""A model formula: what it names, and what its columns are called here."""

from __future__ import annotations

import ast
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from clingstone.display import listed, quoted
from clingstone.needs import InputError

TIMES = " × "
_RANDOM = re.compile(r"\([^()]*\|[^()]*\)|\|\|?")
_ALL_OTHERS = re.compile(r"(?<![\w.`\])])\.(?![\w.(])")
_TRANSFORMED = re.compile(r"(?:(?:np|numpy)\.)?(log|log2|log10|log1p|sqrt|cbrt|exp)\(.*\)", re.DOTALL)
_FACTOR = re.compile(r"C\(\s*(`[^`]+`|\w+)\s*(?:,.*)?\)", re.DOTALL)
_TICKED = "__ticked__"
_NUMPY = ("where", "clip", "round", "pi", "e")
_ALLOWED = (
    ast.Expression, ast.Name, ast.Load, ast.Constant, ast.Call, ast.keyword, ast.Attribute,
    ast.BinOp, ast.UnaryOp, ast.Compare, ast.BoolOp, ast.operator, ast.unaryop, ast.cmpop, ast.boolop,
    ast.List, ast.Tuple, ast.Dict,
)  # fmt: skip


@dataclass(frozen=True, eq=False)
class Parsed:
    """A formula taken apart.

    response : the left side as written. made_of : columns of the left side. predictors : columns
    of the right side. lookups : columns used as they are, outside any function. declared : columns
    made factors with C(). transformed : name of the function round the response, or "".
    """

    text: str
    formula: Any
    response: str
    made_of: tuple[str, ...]
    predictors: tuple[str, ...]
    lookups: frozenset[str]
    declared: frozenset[str]
    transformed: str


def parse(model: str, known: Sequence[str]) -> Parsed:
    """Names and parts of ``"y ~ x + arm"``; ``known`` are the columns there are.

    Raises
    ------
    InputError : no ``~``, more than one response, a random-effects part, or a slip in the notation.
    """
    from formulaic import Formula
    from formulaic.errors import FormulaicError

    _refuse(model)
    try:
        formula = Formula(model)
    except (FormulaicError, SyntaxError) as error:
        plain = re.sub(r"\x1b\[[0-9;]*m", "", str(error)).replace("⧛", "»").replace("⧚", "«")
        raise InputError(
            f"the model cannot be read: {' '.join(plain.split())}",
            "Write it as 'y ~ x + arm', interactions as 'x*arm', odd column names in `backticks`.",
        ) from error
    left, right = list(getattr(formula, "lhs", ())), getattr(formula, "rhs", ())
    if len(left) != 1 or len(left[0].factors) != 1 or isinstance(right, tuple):
        raise InputError(
            f"the model ‘{model}’ needs one response on the left and one set of terms on the right",
            "Write 'y ~ x + arm', or 'log(y) ~ x'.",
        )
    response = str(left[0].factors[0].expr)
    factors = {f.expr: f.eval_method.value for t in right for f in t.factors}
    made_of = variables(response, left[0].factors[0].eval_method.value, known)
    if not made_of:
        raise InputError(f"the response ‘{response}’ names no column", "Write the model as 'y ~ x'.")
    found = [v for expr, how in factors.items() for v in variables(expr, how, known)]
    hit = _TRANSFORMED.fullmatch(response)
    return Parsed(
        text=model.strip(),
        formula=formula,
        response=response,
        made_of=made_of,
        predictors=tuple(dict.fromkeys(found)),
        lookups=frozenset(expr for expr, how in factors.items() if how == "lookup"),
        declared=frozenset(m.group(1).strip("`") for e in factors if (m := _FACTOR.fullmatch(e))),
        transformed=hit.group(1) if hit else "",
    )


def _refuse(model: str) -> None:
    if "~" not in model:
        raise InputError(
            f"the model ‘{model}’ has no ~ between response and predictors", "Write 'y ~ x + arm'."
        )
    if _RANDOM.search(model):
        raise InputError(
            f"the model ‘{model}’ has a part with |",
            "Groups are declared with group=, not inside the formula.",
        )
    if _ALL_OTHERS.search(model):
        raise InputError(
            f"the model ‘{model}’ has a dot for all other columns, which would take in ids, times and places",
            "Name the predictors.",
        )


def variables(expression: str, how: str, known: Sequence[str]) -> tuple[str, ...]:
    """Columns that one factor of a formula uses; names of functions and modules are not columns."""
    from formulaic.transforms import TRANSFORMS

    if how == "literal":
        return ()
    if how == "lookup":
        return (expression,)
    ticked = re.findall(r"`([^`]+)`", expression)
    try:
        tree = ast.parse(re.sub(r"`[^`]+`", _TICKED, expression), mode="eval")
    except SyntaxError as error:
        raise InputError(
            f"‘{expression}’ in the model cannot be read: {error.msg}", "Check its brackets."
        ) from error
    _only_arithmetic(expression, tree)
    called = {id(n.func) for n in ast.walk(tree) if isinstance(n, ast.Call)}
    roots = {id(n.value) for n in ast.walk(tree) if isinstance(n, ast.Attribute)}
    names = [
        n.id
        for n in ast.walk(tree)
        if isinstance(n, ast.Name)
        and id(n) not in called | roots
        and n.id != _TICKED
        and (n.id in known or n.id not in TRANSFORMS)
    ]
    quoted_names = [
        str(n.args[0].value)
        for n in ast.walk(tree)
        if isinstance(n, ast.Call) and isinstance(n.func, ast.Name) and n.func.id == "Q"
        if len(n.args) == 1 and isinstance(n.args[0], ast.Constant)
    ]
    return tuple(dict.fromkeys([*ticked, *quoted_names, *names]))


def _only_arithmetic(expression: str, tree: ast.AST) -> None:
    """Stop at anything but arithmetic and known functions.

    A formula is worked out as Python, and may come from a saved folder that somebody else wrote.
    """
    from formulaic.transforms import TRANSFORMS

    for node in ast.walk(tree):
        if isinstance(node, ast.Attribute):
            root = node.value.id if isinstance(node.value, ast.Name) else ""
            if root in ("np", "numpy") and (
                isinstance(getattr(np, node.attr, None), np.ufunc) or node.attr in _NUMPY
            ):
                continue
            if root == "contr" and not node.attr.startswith("_"):
                continue
            raise _not_known(expression, ast.unparse(node))
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id not in TRANSFORMS:
            raise _not_known(expression, node.func.id)
        if not isinstance(node, _ALLOWED):
            raise _not_known(expression, ast.unparse(node))


def _not_known(expression: str, what: str) -> InputError:
    inside = "" if what == expression else f" in ‘{expression}’"
    return InputError(
        f"‘{what}’{inside} is no arithmetic or function that a model may use here",
        "Functions that may be used: log, log10, log2, exp, poly, bs, center, scale, C, I, and "
        "those of numpy "
        "that work value by value, such as np.sqrt. Make any other column before.",
    )


def short(expression: str) -> str:
    """A factor's own name: ``C(arm, …)`` is arm."""
    hit = _FACTOR.fullmatch(expression)
    return hit.group(1).strip("`") if hit else expression


def term_name(factors: Sequence[str]) -> str:
    """The name of a term: its factors with a × between them; no factor is the constant."""
    kept = [short(f) for f in factors if f != "1"]
    return TIMES.join(kept) if kept else "constant"


def column_name(column: str, scoped: Sequence[Any], levels: Mapping[str, Mapping[str, str]]) -> str:
    """A design column in our words.

    Parameters
    ----------
    column : the library's name of it. scoped : the term's codings, each with ``factors`` that have
        ``factor.expr`` and ``reduced``. levels : factor → level as printed there → as printed here.
    """
    for coding in scoped:
        pattern = ":".join(re.escape(f.factor.expr) + r"(?:\[(.*)\])?" for f in coding.factors)
        hit = re.fullmatch(pattern, column, re.DOTALL)
        if hit is None or not coding.factors:
            continue
        parts = [
            _part(f.factor.expr, mark, f.reduced, levels)
            for f, mark in zip(coding.factors, hit.groups(), strict=True)
        ]
        return TIMES.join(parts)
    return "constant" if column == "Intercept" else column


def _part(expression: str, mark: str | None, reduced: bool, levels: Mapping[str, Mapping[str, str]]) -> str:
    name = short(expression)
    if mark is None:
        return name
    own = levels.get(expression)
    if own is None:  # several columns of one function, such as poly(x, 2)
        return f"{name}, part {mark}"
    if mark in own and not reduced:
        return f"{name}: {own[mark]}"
    kind, _, rest = mark.partition(".")
    if kind == "T" and rest in own:
        return f"{name}: {own[rest]}"
    if kind == "S" and rest in own:
        return f"{name}: {own[rest]} against the mean"
    return f"{name}: {mark}"


def known_term(name: str) -> str:
    """A name of a term as a user may write it, in our own form: "dose:arm" → "dose × arm"."""
    parts = [short(p.strip()) for p in re.split(r"\s*[:×]\s*", name.strip())]
    return TIMES.join(parts)


def same_term(a: str, b: str) -> bool:
    """Terms are the same whatever the order of their factors."""
    return sorted(known_term(a).split(TIMES)) == sorted(known_term(b).split(TIMES))


def unknown(what: str, name: str, choices: Sequence[str]) -> InputError:
    """An error for a name that is no term, factor, coefficient or contrast."""
    from clingstone.display import near

    close = near(name, choices)
    hint = f"Did you mean {listed((f'‘{c}’' for c in close), last='or')}?" if close else ""
    return InputError(
        f"{what} names ‘{name}’, which is not in the model",
        hint or f"The model has {quoted(choices, most=12)}.",
    )
