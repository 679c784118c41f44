"""Formulas as text: arithmetic, comparisons and a short list of functions on arrays.

A text is parsed to Python's syntax tree, and what is allowed of that is turned into a tree of our own, which NumPy
evaluates. Nothing is ever executed as Python: there are no attributes, subscripts, strings or calls but of the
functions listed here.
"""

from __future__ import annotations

import ast
import difflib
import math
import operator
import warnings
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from fieldmover.errors import FieldError, JobError

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import ArrayLike, NDArray

    Array = NDArray[np.float64]

FUNCTIONS = {
    "abs": ("abs", 1),
    "acos": ("arccos", 1),
    "asin": ("arcsin", 1),
    "atan": ("arctan", 1),
    "atan2": ("arctan2", 2),
    "cos": ("cos", 1),
    "exp": ("exp", 1),
    "log": ("log", 1),
    "log10": ("log10", 1),
    "max": ("maximum", None),
    "min": ("minimum", None),
    "sin": ("sin", 1),
    "sqrt": ("sqrt", 1),
    "tan": ("tan", 1),
    "tanh": ("tanh", 1),
    "where": ("where", 3),
}
"""Name: its name in NumPy, and how many arguments it takes (None: two or more, value by value)."""

CONSTANTS = {"pi": math.pi}

_LONGEST = 2000  # characters
_DEEPEST = 100  # levels of the tree
_SHOWN = 60  # characters on each side of a mistake
_LARGEST_POWER = 100.0  # as a written number

_ARITHMETIC: dict[type[ast.operator], Callable[[Any, Any], Any]] = {
    ast.Add: operator.add,
    ast.Sub: operator.sub,
    ast.Mult: operator.mul,
    ast.Div: operator.truediv,
    ast.Pow: operator.pow,
}
_COMPARISONS: dict[type[ast.cmpop], Callable[[Any, Any], Any]] = {
    ast.Lt: operator.lt,
    ast.LtE: operator.le,
    ast.Gt: operator.gt,
    ast.GtE: operator.ge,
    ast.Eq: operator.eq,
    ast.NotEq: operator.ne,
}
_INSTEAD: dict[type[ast.AST], str] = {
    ast.BitXor: "^ is not a power: write **",
    ast.BitAnd: "& is not known: write and",
    ast.BitOr: "| is not known: write or",
    ast.Invert: "~ is not known: write not",
    ast.Mod: "% is not known",
    ast.FloorDiv: "// is not known",
    ast.MatMult: "@ is not known",
    ast.Attribute: "a dot after a name is not known",
    ast.Subscript: "square brackets are not known",
    ast.IfExp: "if and else are not known: write where(condition, a, b)",
}


@dataclass(frozen=True)
class _Number:
    value: float

    def compute(self, values: Mapping[str, Any], np: Any) -> Any:
        return np.float64(self.value)


@dataclass(frozen=True)
class _Name:
    name: str

    def compute(self, values: Mapping[str, Any], np: Any) -> Any:
        return values[self.name]


@dataclass(frozen=True)
class _Operation:
    """An operation on the values of other nodes; what is true counts 1, and what is not 0 is true."""

    function: Callable | str
    parts: tuple[Any, ...]
    gives_truth: bool = False

    def compute(self, values: Mapping[str, Any], np: Any) -> Any:
        parts = [part.compute(values, np) for part in self.parts]
        parts = [part * 1.0 if part.dtype == bool else part for part in parts]
        function = getattr(np, self.function) if isinstance(self.function, str) else self.function
        if self.function == "where":
            return function(*parts)
        result = function(*parts[:2])
        for part in parts[2:]:
            result = function(result, part)
        return result


class Expression:
    """A formula over named quantities.

    Numbers, names, ``+ - * / **``, comparisons (also ``0 < x < 1``), ``and``, ``or``, ``not``, the constant ``pi`` and
    the functions in `FUNCTIONS`, all value by value. A comparison counts 1 where it holds and 0 elsewhere.

    Parameters
    ----------
    text : str
        The formula; line breaks count as blanks.
    names : collection of str
        Names that may be used.

    Attributes
    ----------
    text : str
    names : frozenset of str
        Names that are used.
    is_mask : bool
        Whether it is a comparison, or several joined by and, or, not.

    Raises
    ------
    JobError
        If the text is no formula, uses a name that is not there, calls anything else, or is too long. The message
        gives the place in the text.

    Examples
    --------
    >>> import numpy as np
    >>> pressure = Expression("(gamma - 1) * rho * max(u, 0)", {"rho", "u", "gamma"})
    >>> sorted(pressure.names)
    ['gamma', 'rho', 'u']
    >>> pressure.evaluate({"rho": np.array([1.0, 2.0]), "u": np.array([3.0, -1.0]), "gamma": 1.5})
    array([1.5, 0. ])
    >>> Expression("r > 2 and not rho < 1e-6", {"r", "rho"}).mask({"r": np.array([1, 3]), "rho": 1.0})
    array([False,  True])
    >>> Expression("rhoo * 2", {"rho", "u"})
    Traceback (most recent call last):
        ...
    fieldmover.errors.JobError: expression 'rhoo * 2', character 1: unknown name 'rhoo' (did you mean 'rho'?); ...
    """

    def __init__(self, text: str, names: Collection[str]) -> None:
        self.text = text
        self._known = sorted(names)
        self._used: set[str] = set()
        self._line = " ".join(text.splitlines())
        self._root = self._build(self._parse(), 0)
        self.names = frozenset(self._used)
        self.is_mask = isinstance(self._root, _Operation) and self._root.gives_truth

    def __repr__(self) -> str:
        return f"Expression({self.text!r})"

    def evaluate(self, values: Mapping[str, ArrayLike], shape: tuple[int, ...] = (), finite: bool = True) -> Array:
        """The formula's value.

        Parameters
        ----------
        values : mapping of str to array_like
            At least those in `names`; arrays of one shape, or numbers.
        shape : tuple of int
            Shape of the result where no array is used; otherwise arrays must broadcast with it.
        finite : bool
            Whether a value that is not finite is an error.

        Returns
        -------
        ndarray
            float64; comparisons give 1 and 0.

        Raises
        ------
        FieldError
            If shapes do not fit, or a value is not finite.
        """
        import numpy as np

        result = np.asarray(self._compute(values, shape), dtype=np.float64)
        bad = ~np.isfinite(result) if finite else np.zeros(())
        if bad.any():
            place = [int(i) for i in np.argwhere(bad)[0]]
            raise FieldError(
                f"expression {self.text!r} gives {int(bad.sum())} values that are not finite, the first "
                f"({result[tuple(place)]}) at index {place}"
            )
        return result

    def mask(self, values: Mapping[str, ArrayLike], shape: tuple[int, ...] = ()) -> NDArray[np.bool_]:
        """Where the formula holds; arguments as `evaluate`.

        Raises
        ------
        JobError
            If the formula is no comparison.
        FieldError
            If shapes do not fit.
        """
        if not self.is_mask:
            raise JobError(f"expression {self.text!r}: expected a comparison that holds or not")
        result: NDArray[np.bool_] = self._compute(values, shape)
        return result

    def _compute(self, values: Mapping[str, ArrayLike], shape: tuple[int, ...]) -> Any:
        import numpy as np

        used = {name: np.asarray(values[name], dtype=np.float64) for name in self.names}
        try:
            shape = np.broadcast_shapes(shape, *(array.shape for array in used.values()))
        except ValueError:
            found = ", ".join(f"{name} {array.shape}" for name, array in sorted(used.items()))
            raise FieldError(f"expression {self.text!r}: shapes differ: {found}; expected {shape or 'one'}") from None
        with np.errstate(all="ignore"):
            return np.broadcast_to(self._root.compute(used, np), shape).copy()

    def _parse(self) -> ast.AST:
        if len(self._line) > _LONGEST:
            raise JobError(f"expression of {len(self._line)} characters, expected at most {_LONGEST}")
        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                return ast.parse(self._line.strip(), mode="eval").body
        except SyntaxError as error:
            blanks = len(self._line) - len(self._line.lstrip())
            raise self._error((error.offset or 1) - 1 + blanks, f"not a formula ({error.msg})") from None
        except (ValueError, RecursionError, MemoryError):
            raise self._error(0, "not a formula") from None

    def _build(self, node: ast.AST, depth: int) -> Any:
        """The same in our own tree; an error for whatever is not allowed."""
        if depth > _DEEPEST:
            raise self._at(node, f"nested more than {_DEEPEST} deep")
        parts = [self._build(child, depth + 1) for child in _operands(node)]
        match node:
            case ast.Constant(value=int() | float()) if not isinstance(node.value, bool):
                return _Number(self._finite(node))
            case ast.Name():
                return self._name(node)
            case ast.UnaryOp(op=ast.USub()):
                return _Operation(operator.neg, (*parts,))
            case ast.UnaryOp(op=ast.UAdd()):
                return _Operation(operator.pos, (*parts,))
            case ast.UnaryOp(op=ast.Not()):
                return _Operation("logical_not", (*parts,), gives_truth=True)
            case ast.BinOp() if type(node.op) in _ARITHMETIC:
                self._check_power(node)
                return _Operation(_ARITHMETIC[type(node.op)], (*parts,))
            case ast.BoolOp():
                name = "logical_and" if isinstance(node.op, ast.And) else "logical_or"
                return _Operation(name, (*parts,), gives_truth=True)
            case ast.Compare() if all(type(op) in _COMPARISONS for op in node.ops):
                pairs = [
                    _Operation(_COMPARISONS[type(op)], (left, right), gives_truth=True)
                    for op, left, right in zip(node.ops, parts, parts[1:], strict=False)
                ]
                return pairs[0] if len(pairs) == 1 else _Operation("logical_and", (*pairs,), True)
            case ast.Call():
                return self._call(node, parts)
        raise self._refused(node)

    def _name(self, node: ast.Name) -> _Name | _Number:
        name = node.id
        if name in self._known:
            self._used.add(name)
            return _Name(name)
        if name in CONSTANTS:
            return _Number(CONSTANTS[name])
        if name in FUNCTIONS:
            raise self._at(node, f"{name} is a function: expected {name}(...)")
        near = difflib.get_close_matches(name, self._known, 1)
        hint = f" (did you mean {near[0]!r}?)" if near else ""
        raise self._at(node, f"unknown name {name!r}{hint}; known are {', '.join(self._known) or 'none'}")

    def _call(self, node: ast.Call, parts: list[Any]) -> _Operation:
        name = node.func.id if isinstance(node.func, ast.Name) else None
        if name not in FUNCTIONS:
            near = difflib.get_close_matches(name or "", FUNCTIONS, 1)
            hint = f" (did you mean {near[0]!r}?)" if near else ""
            found = f"unknown function {name!r}{hint}" if name else "only a function's name may be called"
            raise self._at(node, f"{found}; known are {', '.join(FUNCTIONS)}")
        if node.keywords:
            raise self._at(node, f"{name} takes no arguments by name")
        function, count = FUNCTIONS[name]
        if len(parts) != count and (count is not None or len(parts) < 2):
            expected = count or "2 or more (it works value by value)"
            raise self._at(node, f"{name} has {len(parts)} arguments, expected {expected}")
        return _Operation(function, (*parts,))

    def _finite(self, node: ast.Constant) -> float:
        try:
            value = float(node.value)  # type: ignore[arg-type]
        except OverflowError:
            value = math.inf
        if not math.isfinite(value):
            raise self._at(node, "a number beyond the range of float64")
        return value

    def _check_power(self, node: ast.BinOp) -> None:
        power = node.right.operand if isinstance(node.right, ast.UnaryOp) else node.right
        if isinstance(node.op, ast.Pow) and isinstance(power, ast.Constant) and self._finite(power) > _LARGEST_POWER:
            raise self._at(power, f"power {self._finite(power):g}, expected at most {_LARGEST_POWER:g}")

    def _refused(self, node: ast.AST) -> JobError:
        culprit = getattr(node, "op", node)
        known = "expected numbers, names, + - * / **, comparisons, and, or, not, and functions"
        return self._at(node, _INSTEAD.get(type(culprit), known))

    def _at(self, node: Any, message: str) -> JobError:
        line = self._line.strip()
        place = len(line.encode()[: node.col_offset].decode(errors="ignore"))
        return self._error(place + len(self._line) - len(self._line.lstrip()), message)

    def _error(self, place: int, message: str) -> JobError:
        low, high = max(0, place - _SHOWN), place + _SHOWN
        shown = self._line[low:high]
        text = ("..." if low else "") + shown + ("..." if high < len(self._line) else "")
        return JobError(f"expression {text!r}, character {place + 1}: {message}")


def _operands(node: ast.AST) -> list[ast.expr]:
    """The parts of a node that have values."""
    match node:
        case ast.UnaryOp(op=ast.USub() | ast.UAdd() | ast.Not()):
            return [node.operand]
        case ast.BinOp() if type(node.op) in _ARITHMETIC:
            return [node.left, node.right]
        case ast.BoolOp():
            return node.values
        case ast.Compare():
            return [node.left, *node.comparators]
        case ast.Call(func=ast.Name(id=name)) if name in FUNCTIONS:
            return node.args
    return []
