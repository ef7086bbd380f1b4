"""A small language for what a user decides: comparisons and arithmetic over named quantities.

Text is parsed, never run: only the few forms named in `parse` exist. What is unknown (NaN) stays
unknown through arithmetic and comparisons, and through and, or, not after Kleene (1938): `unknown
or true` is true, `unknown and false` is false, all else that depends on it is unknown.
"""

from __future__ import annotations

import ast
import difflib
from collections.abc import Callable, Collection, Mapping
from typing import Final

import numpy as np
from numpy.typing import ArrayLike, NDArray

from terrasol.errors import SettingError

LONGEST: Final = 1000
"""Characters that a text may have (judgement, no source)."""

DEEPEST: Final = 40
"""Forms that may stand within each other (judgement, no source)."""

Values = NDArray[np.float64]

Needs = Callable[[str], str]
"""Says of an unknown name what would make it known; nothing if nothing would."""

_ARITHMETIC: Final[dict[type[ast.operator], Callable[[Values, Values], Values]]] = {
    ast.Add: np.add,
    ast.Sub: np.subtract,
    ast.Mult: np.multiply,
    ast.Div: np.divide,
}
_COMPARISONS: Final[dict[type[ast.cmpop], Callable[[Values, Values], NDArray[np.bool_]]]] = {
    ast.Lt: np.less,
    ast.LtE: np.less_equal,
    ast.Gt: np.greater,
    ast.GtE: np.greater_equal,
    ast.Eq: np.equal,
    ast.NotEq: np.not_equal,
}
_FORMS: Final = "numbers, names, + - * /, < <= > >= == !=, and, or, not, and brackets"


def nothing_needed(name: str) -> str:
    """Of names that nothing would make known."""
    return ""


def parse(
    text: str,
    known: Collection[str],
    *,
    what: str,
    logical: bool,
    needs: Needs = nothing_needed,
) -> ast.expr:
    """Read an expression and refuse all that is not in the language.

    Parameters
    ----------
    text : str
        Numbers, names, + - * /, comparisons (also chained), and, or, not, brackets.
    known : collection of str
        Names of quantities.
    what : str
        What the text is, for messages: 'rule', 'score'.
    logical : bool
        Whether it must be true or false, or else a number.
    needs : callable
        Says of a name that is not known what would make it known, or nothing.

    Returns
    -------
    ast.expr
        For `evaluate`.

    Raises
    ------
    SettingError
        Another form, an unknown name, a truth in place of a number or the reverse, or a text too
        long. The message quotes the text and lists the known names, or says what a name needs.
    """
    if len(text) > LONGEST:
        raise SettingError(f"the {what} has {len(text)} characters; {LONGEST} are allowed")
    try:
        tree = ast.parse(text.strip(), mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise SettingError(
            f"the {what} {text!r} cannot be read; it may hold {_FORMS} (== for equal)"
        ) from None
    try:
        for name in names_in(tree):
            if name not in known and (lacking := needs(name)):
                raise SettingError(f"names {name}, which needs {lacking}")
        _check(tree, known, logical, DEEPEST)
    except SettingError as problem:
        raise SettingError(f"the {what} {text!r} {problem}") from None
    return tree


def names_in(tree: ast.expr) -> tuple[str, ...]:
    """Quantities that an expression speaks of, in alphabetical order."""
    return tuple(sorted({node.id for node in ast.walk(tree) if isinstance(node, ast.Name)}))


def evaluate(tree: ast.expr, quantities: Mapping[str, ArrayLike]) -> Values:
    """Value of an expression that `parse` gave.

    Parameters
    ----------
    tree : ast.expr
    quantities : mapping of str to array_like
        One array a name, broadcast together; NaN where unknown.

    Returns
    -------
    ndarray of float64
        Numbers, or 1 for true and 0 for false; NaN where unknown. A division by zero is unknown.
    """
    with np.errstate(divide="ignore", invalid="ignore", over="ignore"):
        return _value(tree, quantities)


def _check(node: ast.expr, known: Collection[str], logical: bool, depth: int) -> None:
    """Refuse a node that is not in the language, or not of the kind wanted."""
    if depth == 0:
        raise SettingError(f"is nested more than {DEEPEST} deep; simplify it")
    parts, are_logical, is_logical = _form(node, known)
    if is_logical != logical:
        raise SettingError(
            f"needs a comparison where it has the number {ast.unparse(node)!r}"
            if logical
            else f"needs a number where it has the comparison {ast.unparse(node)!r}"
        )
    for part in parts:
        _check(part, known, are_logical, depth - 1)


def _form(node: ast.expr, known: Collection[str]) -> tuple[list[ast.expr], bool, bool]:
    """Parts of a node, whether these must be logical, and whether the node is."""
    match node:
        case ast.BoolOp(values=parts):
            return parts, True, True
        case ast.UnaryOp(op=ast.Not(), operand=part):
            return [part], True, True
        case ast.UnaryOp(op=ast.USub() | ast.UAdd(), operand=part):
            return [part], False, False
        case ast.Compare(left=left, ops=signs, comparators=others) if all(
            type(sign) in _COMPARISONS for sign in signs
        ):
            return [left, *others], False, True
        case ast.BinOp(left=left, op=sign, right=right) if type(sign) in _ARITHMETIC:
            return [left, right], False, False
        case ast.Constant(value=int() | float() as number) if not isinstance(number, bool):
            if not np.isfinite(float(number)):
                raise SettingError("holds a number beyond all bounds")
            return [], False, False
        case ast.Name(id=name):
            if name not in known:
                raise SettingError(_unknown(name, known))
            return [], False, False
    raise SettingError(f"holds {ast.unparse(node)!r}; it may hold {_FORMS}")


def _unknown(name: str, known: Collection[str]) -> str:
    near = difflib.get_close_matches(name, known, 1)
    guess = f" (did you mean {near[0]}?)" if near else ""
    return f"names {name}, which is unknown{guess}; known are {', '.join(sorted(known))}"


def _value(node: ast.expr, quantities: Mapping[str, ArrayLike]) -> Values:
    """Value of a node that was checked."""
    match node:
        case ast.Name(id=name):
            return np.asarray(quantities[name], np.float64)
        case ast.Constant(value=int() | float() as number):
            return np.asarray(number, np.float64)
        case ast.UnaryOp(op=ast.Not(), operand=part):
            return 1.0 - _value(part, quantities)
        case ast.UnaryOp(op=sign, operand=part):
            value = _value(part, quantities)
            return -value if isinstance(sign, ast.USub) else value
        case ast.BinOp(left=left, op=operator, right=right):
            result = _ARITHMETIC[type(operator)](
                _value(left, quantities), _value(right, quantities)
            )
            return np.where(np.isfinite(result), result, np.nan)
        case ast.BoolOp(op=joint, values=parts):
            decisive = 0.0 if isinstance(joint, ast.And) else 1.0
            return _joined([_value(part, quantities) for part in parts], decisive)
        case ast.Compare(left=first, ops=signs, comparators=others):
            values = [_value(part, quantities) for part in (first, *others)]
            pairs = zip(values, signs, values[1:], strict=False)
            return _joined([_compared(a, sign, b) for a, sign, b in pairs], 0.0)
    raise AssertionError(f"unchecked form {ast.dump(node)}")


def _compared(left: Values, sign: ast.cmpop, right: Values) -> Values:
    """1 where a comparison holds, 0 where not, NaN where a side is unknown."""
    holds = _COMPARISONS[type(sign)](left, right)
    return np.where(np.isnan(left) | np.isnan(right), np.nan, holds)


def _joined(truths: list[Values], decisive: float) -> Values:
    """And (decisive 0) or or (decisive 1) of truths: one decisive one decides."""
    decided = np.logical_or.reduce(np.broadcast_arrays(*(truth == decisive for truth in truths)))
    unknown = np.logical_or.reduce(np.broadcast_arrays(*(np.isnan(truth) for truth in truths)))
    return np.where(decided, decisive, np.where(unknown, np.nan, 1.0 - decisive))
