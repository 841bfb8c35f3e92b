"""Coefficients written as expressions in x, e.g. "1 - x**2". Nothing is ever handed to `eval`."""

from __future__ import annotations

import ast
import re
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from srcfit.errors import CaseError
from srcfit.member import Array

LONGEST = 300
FUNCTIONS: dict[str, Callable[[Any], Any]] = {
    "exp": np.exp, "log": np.log, "sqrt": np.sqrt, "sin": np.sin, "cos": np.cos, "tan": np.tan,
    "sinh": np.sinh, "cosh": np.cosh, "tanh": np.tanh, "abs": np.abs,
}  # fmt: skip
OPERATORS: dict[type[ast.AST], Callable[..., Any]] = {
    ast.Add: np.add, ast.Sub: np.subtract, ast.Mult: np.multiply, ast.Div: np.divide,
    ast.Pow: np.power, ast.USub: np.negative, ast.UAdd: np.positive,
}  # fmt: skip
_WORD = re.compile(r"(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?|[A-Za-z_]\w*|\*\*|[-+*/()]|\s+")


@dataclass(frozen=True)
class Expression:
    """A function of x as it was written; called with an array of places."""

    text: str

    def __call__(self, x: Array) -> Array:
        """Values at the places `x`."""
        x = np.asarray(x, dtype=float)
        with np.errstate(all="ignore"):
            return np.broadcast_to(_value(_tree(self.text), x), x.shape).astype(float)


def expression(text: str, where: str) -> float | Expression:
    """Read an expression: a number when it has no x in it.

    Raises
    ------
    CaseError
        When the text is no expression in + - * / **, numbers, x, pi and the known functions.
    """
    found = Expression(text)
    try:
        tree = _tree(text)
    except ValueError as error:
        raise CaseError(
            f'"{text[:LONGEST]}" is no expression in x: {error}',
            where,
            "use + - * / ** ( ), numbers, x, pi and " + ", ".join(FUNCTIONS),
        ) from None
    if any(isinstance(node, ast.Name) and node.id == "x" for node in ast.walk(tree)):
        return found
    value = float(found(np.zeros(1))[0])
    if not np.isfinite(value):
        raise CaseError(f'"{text}" has no finite value', where)
    return value


@lru_cache(maxsize=500)
def _tree(text: str) -> ast.expr:
    """The checked syntax tree; raises ValueError."""
    if len(text) > LONGEST:
        raise ValueError(f"it is longer than {LONGEST} characters")
    if "^" in text:
        raise ValueError("a power is written **, as in x**2")
    words = _WORD.findall(text)
    if "".join(words) != text:
        raise ValueError("it has characters that mean nothing here")
    for word in words:
        if re.match(r"[A-Za-z_]", word) and word not in (*FUNCTIONS, "x", "pi"):
            raise ValueError(f"`{word}` means nothing here")
    try:
        tree = ast.parse(text.strip(), mode="eval").body
    except (SyntaxError, ValueError, RecursionError, MemoryError):
        raise ValueError("it is not complete, or its brackets do not match") from None
    _check(tree)
    return tree


def _check(node: ast.AST) -> None:
    """Only numbers, x, pi, known operators and functions of one argument; raises ValueError."""
    if isinstance(node, ast.Constant):
        if type(node.value) not in (int, float):
            raise ValueError(f"{node.value!r} is no number")
    elif isinstance(node, ast.Name):
        if node.id not in ("x", "pi"):
            raise ValueError(f"`{node.id}` needs its argument in brackets")
    elif isinstance(node, ast.BinOp) and type(node.op) in OPERATORS:
        _check(node.left)
        _check(node.right)
    elif isinstance(node, ast.UnaryOp) and type(node.op) in OPERATORS:
        _check(node.operand)
    elif (
        isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id in FUNCTIONS
        and len(node.args) == 1
        and not node.keywords
    ):
        _check(node.args[0])
    else:
        raise ValueError("it is more than a formula")


def _value(node: ast.AST, x: Array) -> Any:
    match node:
        case ast.Constant(value=int() | float() as number):
            return np.float64(number)
        case ast.Name(id="x"):
            return x
        case ast.Name():
            return np.float64(np.pi)
        case ast.BinOp():
            return OPERATORS[type(node.op)](_value(node.left, x), _value(node.right, x))
        case ast.UnaryOp():
            return OPERATORS[type(node.op)](_value(node.operand, x))
        case ast.Call(func=ast.Name(id=name)):
            return FUNCTIONS[name](_value(node.args[0], x))
    raise AssertionError(f"{node!r} has passed the check")  # pragma: no cover
