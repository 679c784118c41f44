"""Numbers as people write them in a job: 3, "2 pi", "-pi/2", "30 deg"."""

from __future__ import annotations

import ast
import math
import re

_NAMES = {"pi": math.pi, "deg": math.pi / 180}
_LONGEST = 100


def number(text: str) -> float:
    """Value of an arithmetic expression with + - * / ( ), pi and deg; "2 pi" means 2 * pi.

    Raises
    ------
    ValueError
        If the text is anything else, or its value is not finite.

    Examples
    --------
    >>> number("pi/2") == math.pi / 2, number("-(1 + 2) * 3"), round(number("30 deg"), 6)
    (True, -9.0, 0.523599)
    """
    problem = f'{text[:_LONGEST]!r} is not a number; expected one like 3.5, "2 pi" or "-pi/2"'
    if len(text) > _LONGEST:
        raise ValueError(problem)
    spelled = re.sub(r"(?<=[\d.)])\s*(?=pi\b|deg\b|\()", "*", text.strip())
    try:
        value = _value(ast.parse(spelled, mode="eval").body)
    except (SyntaxError, ValueError, ArithmeticError, RecursionError):
        raise ValueError(problem) from None
    if not math.isfinite(value):
        raise ValueError(problem)
    return value


def _value(node: ast.expr) -> float:
    match node:
        case ast.Constant(value=int() | float() as value) if not isinstance(value, bool):
            return float(value)
        case ast.Name(id=name) if name in _NAMES:
            return _NAMES[name]
        case ast.UnaryOp(op=ast.USub(), operand=operand):
            return -_value(operand)
        case ast.BinOp(left=left, op=ast.Add(), right=right):
            return _value(left) + _value(right)
        case ast.BinOp(left=left, op=ast.Sub(), right=right):
            return _value(left) - _value(right)
        case ast.BinOp(left=left, op=ast.Mult(), right=right):
            return _value(left) * _value(right)
        case ast.BinOp(left=left, op=ast.Div(), right=right):
            return _value(left) / _value(right)
    raise ValueError
