"""Arithmetic on named arrays, for coefficients like "sqrt(9.81 * h)" or "abs(u) + 0.1".

Only numbers, names, + - * / **, and a few functions are understood: nothing can be called,
looked up or run beyond that.
"""

from __future__ import annotations

import ast
from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray

from probes.errors import SettingsError

Array = NDArray[np.float64]

_FUNCTIONS: dict[str, Callable[..., Any]] = {
    "sqrt": np.sqrt,
    "abs": np.abs,
    "exp": np.exp,
    "log": np.log,
    "hypot": np.hypot,
    "min": np.minimum,
    "max": np.maximum,
}
_OPERATORS: dict[type[ast.operator], Callable[[Any, Any], Any]] = {
    ast.Add: np.add,
    ast.Sub: np.subtract,
    ast.Mult: np.multiply,
    ast.Div: np.divide,
    ast.Pow: np.power,
}
_LONGEST = 400


def evaluate(text: str, field: Callable[[str], Array], where: str) -> Array:
    """The formula's value; field(name) gives an array or raises.

    Raises SettingsError for anything that is no such formula.
    """
    if len(text) > _LONGEST:
        raise SettingsError("the formula is too long", where)
    try:
        tree = ast.parse(text, mode="eval")
    except (SyntaxError, ValueError, RecursionError, MemoryError) as error:
        raise SettingsError(f"{text!r} is neither a file nor a formula", where) from error
    with np.errstate(all="ignore"):  # what is not finite is reported with its cell
        return np.asarray(_value(tree.body, field, where), dtype=np.float64)


def _value(node: ast.expr, field: Callable[[str], Array], where: str) -> Any:
    match node:
        case ast.Constant(value=int() | float() as number) if not isinstance(number, bool):
            return np.float64(number)
        case ast.Name(id=name):
            return field(name)
        case ast.UnaryOp(op=ast.USub(), operand=operand):
            return -_value(operand, field, where)
        case ast.BinOp(left=left, op=operator, right=right) if type(operator) in _OPERATORS:
            one, other = _value(left, field, where), _value(right, field, where)
            return _combined(_OPERATORS[type(operator)], (one, other), where)
        case ast.Call(func=ast.Name(id=name), args=given, keywords=[]) if name in _FUNCTIONS:
            values = tuple(_value(a, field, where) for a in given)
            return _combined(_FUNCTIONS[name], values, where)
    known = ", ".join(_FUNCTIONS)
    raise SettingsError(
        f"{ast.unparse(node)!r} is not understood", where, f"use + - * / ** and {known}"
    )


def _combined(function: Callable[..., Any], values: tuple[Any, ...], where: str) -> Any:
    shapes = {np.shape(v) for v in values if np.ndim(v)}
    if len(shapes) > 1:
        raise SettingsError(f"fields of different shapes: {sorted(shapes)}", where)
    try:
        return function(*values)
    except (TypeError, ValueError) as error:
        raise SettingsError(f"cannot be worked out ({error})", where) from error
