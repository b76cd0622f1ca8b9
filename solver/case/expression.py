"""An expression in x, y and z, parsed and evaluated here; it can name nothing else and run nothing.

    parse("cos(pi*x/1.7) * sin(2*y)")(x, y, z) -> array

Allowed: numbers, x, y, z [m], pi, + - * / **, comparisons (1 where true, 0 elsewhere), and the functions below.
"""

from __future__ import annotations

import ast
import operator
from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt

from murmesh.solver.errors import FieldError, nearest

Array = npt.NDArray[np.float64]
Evaluator = Callable[[Array, Array, Array], Array]

FUNCTIONS: dict[str, Callable[..., Any]] = {
    "sin": np.sin,
    "cos": np.cos,
    "tan": np.tan,
    "exp": np.exp,
    "log": np.log,
    "sqrt": np.sqrt,
    "abs": np.abs,
    "minimum": np.minimum,
    "maximum": np.maximum,
    "hypot": np.hypot,
}
_NAMES = ("x", "y", "z", "pi")
_BINARY: dict[type[ast.operator], Callable[[Any, Any], Any]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
    ast.Pow: operator.pow,
}
_COMPARE: dict[type[ast.cmpop], Callable[[Any, Any], Any]] = {
    ast.Lt: operator.lt,
    ast.LtE: operator.le,
    ast.Gt: operator.gt,
    ast.GtE: operator.ge,
}
LONGEST = 500


def parse(text: str) -> Evaluator:
    """The function of (x, y, z) that `text` describes; FieldError names what is not allowed in it."""
    if len(text) > LONGEST:
        raise FieldError(f"expression of {len(text)} characters is longer than {LONGEST}; give the values at points")
    try:
        body = ast.parse(text, mode="eval").body
    except SyntaxError as error:
        raise FieldError(f"expression '{text}' cannot be read: {error.msg}; example: cos(pi*x/1.7)*y") from None
    _check(body, text)

    def evaluate(x: Array, y: Array, z: Array) -> Array:
        names: dict[str, Any] = {"x": x, "y": y, "z": z, "pi": np.pi}
        with np.errstate(all="ignore"):
            values = np.broadcast_to(np.asarray(_value(body, names), dtype=np.float64), np.shape(x))
        if not np.all(np.isfinite(values)):
            raise FieldError(f"expression '{text}' is not finite everywhere on its surface; guard it with maximum()")
        return values

    return evaluate


def _check(node: ast.AST, text: str) -> None:
    """Refuse, before anything is evaluated, whatever `_value` does not know."""
    match node:
        case ast.Constant(value=int() | float()) if not isinstance(node.value, bool):
            return
        case ast.Name(id=name):
            if name not in _NAMES:
                raise FieldError(f"expression '{text}': name '{name}' is not known; {nearest(name, _NAMES)}")
        case ast.UnaryOp(op=ast.USub() | ast.UAdd(), operand=operand):
            _check(operand, text)
        case ast.BinOp(left=left, op=op, right=right) if type(op) in _BINARY:
            _check(left, text)
            _check(right, text)
        case ast.Compare(left=left, ops=[op], comparators=[right]) if type(op) in _COMPARE:
            _check(left, text)
            _check(right, text)
        case ast.Call(func=ast.Name(id=name), args=args, keywords=[]):
            if name not in FUNCTIONS:
                raise FieldError(f"expression '{text}': function '{name}' is not known; {nearest(name, FUNCTIONS)}")
            for arg in args:
                _check(arg, text)
        case _:
            raise FieldError(
                f"expression '{text}': {type(node).__name__} is not allowed; use x, y, z, numbers, + - * / ** and "
                f"{', '.join(sorted(FUNCTIONS))}"
            )


def _value(node: ast.AST, names: dict[str, Any]) -> Any:
    match node:
        case ast.Constant(value=number):
            return float(number)  # type: ignore[arg-type]
        case ast.Name(id=name):
            return names[name]
        case ast.UnaryOp(op=op, operand=operand):
            return -_value(operand, names) if isinstance(op, ast.USub) else _value(operand, names)
        case ast.BinOp(left=left, op=op, right=right):
            return _BINARY[type(op)](_value(left, names), _value(right, names))
        case ast.Compare(left=left, ops=[op], comparators=[right]):
            return np.asarray(_COMPARE[type(op)](_value(left, names), _value(right, names)), dtype=np.float64)
        case ast.Call(func=ast.Name(id=name), args=args):
            return FUNCTIONS[name](*(_value(arg, names) for arg in args))
    raise AssertionError(node)  # pragma: no cover  (_check has refused it)
