"""Which expressions work row by row, and may come from an untrusted place.

An expression of this grammar has columns, numbers, text to compare with, ``+ - * / **``, one comparison at a
time,
and calls of a fixed list of transforms. It can be evaluated block by block, because every value depends on
its own
row (and on what a stateful transform learned from all rows), and it cannot reach anything but the columns.
"""

from __future__ import annotations

import ast
from collections.abc import Callable, Collection
from dataclasses import dataclass
from typing import Any

import numpy as np

from mixbridge.panel.formula import quoted_name
from mixbridge.panel.standardize import standardize
from mixbridge.panel.syntax import tree_of

__all__ = ["ALLOWED", "CODINGS", "ELEMENTWISE", "LEARNING", "NAMESPACE", "violation"]

ELEMENTWISE: dict[str, Callable[..., Any]] = {
    "log": np.log,
    "log1p": np.log1p,
    "log2": np.log2,
    "log10": np.log10,
    "exp": np.exp,
    "expm1": np.expm1,
    "sqrt": np.sqrt,
    "abs": np.abs,
}
"""Transforms of single values; each also under ``np.``."""

LEARNING = ("center", "standardize", "scale", "bs", "cr", "cc")
"""Transforms that learn something from all rows first."""

CODINGS = ("Treatment", "Sum", "Helmert", "Diff", "Poly")
"""Codings of categories, as the second argument of ``C``."""

NAMESPACE: dict[str, Any] = {"np": np, **ELEMENTWISE, "standardize": standardize, "scale": standardize}
"""What a formula can name besides columns and patsy's own functions."""

ALLOWED = ", ".join((*ELEMENTWISE, *LEARNING, "C", "I", "Q", *(f"np.{name}" for name in ELEMENTWISE)))

_LARGEST_POWER = 100
_LARGEST_SETTING = 100  # degrees of freedom and degree of a spline
_OPERATORS = (ast.Add, ast.Sub, ast.Mult, ast.Div, ast.Pow)
_COMPARISONS = (ast.Eq, ast.NotEq, ast.Lt, ast.LtE, ast.Gt, ast.GtE)


class _OutsideGrammarError(Exception):
    """Internal: carries the reason up to `violation`."""


def violation(code: str, columns: Collection[str], numeric: Collection[str]) -> str | None:
    """Return why an expression is outside the grammar, or None if it is inside.

    Parameters
    ----------
    code : str
        The expression.
    columns : collection of str
        Columns it may name.
    numeric : collection of str
        Those of them that hold numbers or truth values: only these enter arithmetic.
    """
    try:
        _Reader(columns, numeric).value(tree_of(code))
    except _OutsideGrammarError as reason:
        return str(reason)
    except RecursionError:
        return "it is nested too deeply"
    return None


@dataclass(frozen=True, slots=True)
class _Reader:
    columns: Collection[str]
    numeric: Collection[str]

    def value(self, node: ast.expr) -> None:
        """Accept a whole factor or the first argument of ``C`` and ``I``: any column, or a number."""
        name = _column(node)
        if name is not None and name in self.columns:
            return
        self.number(node)

    def number(self, node: ast.expr) -> None:
        """Accept an expression that yields numbers or truth values."""
        name = _column(node)
        if name is not None:
            if name not in self.columns:
                raise _OutsideGrammarError(f"{name} is not a column")
            if name not in self.numeric:
                raise _OutsideGrammarError(
                    f"{name} does not hold numbers, so it can only be compared or coded"
                )
            return
        match node:
            case ast.Constant(value=bool() | int() | float()):
                return
            case ast.UnaryOp(op=ast.USub() | ast.UAdd(), operand=operand):
                self.number(operand)
            case ast.BinOp(left=left, op=operator, right=right) if isinstance(operator, _OPERATORS):
                if isinstance(operator, ast.Pow):
                    _check_power(left, right)
                self.number(left)
                self.number(right)
            case ast.Compare(left=left, ops=[operator], comparators=[right]) if isinstance(
                operator, _COMPARISONS
            ):
                self.side(left)
                self.side(right)
            case ast.Compare(ops=[_, _, *_]):
                raise _OutsideGrammarError("it chains comparisons; multiply two comparisons instead")
            case ast.Call():
                self.call(node)
            case _:
                raise _OutsideGrammarError(
                    f"{ast.unparse(node)} is not a number, a column, arithmetic or a transform"
                )

    def side(self, node: ast.expr) -> None:
        """Accept one side of a comparison: also text, and columns of any kind."""
        if not (isinstance(node, ast.Constant) and isinstance(node.value, str)):
            self.value(node)

    def call(self, node: ast.Call) -> None:
        """Accept the call of a listed transform."""
        name = _function(node.func)
        if name is None:
            raise _OutsideGrammarError(f"{ast.unparse(node.func)} is not an allowed transform")
        if not node.args or any(isinstance(argument, ast.Starred) for argument in node.args):
            raise _OutsideGrammarError(f"{name} needs its column as its first argument")
        first, *rest = node.args
        if any(keyword.arg is None for keyword in node.keywords):
            raise _OutsideGrammarError(f"{name} is called with ** arguments")
        settings = [*rest, *(keyword.value for keyword in node.keywords)]
        if name in ("C", "I"):
            self.value(first)
        else:
            self.number(first)
        if settings and name not in ("C", *LEARNING):
            raise _OutsideGrammarError(f"{name} takes one argument")
        for setting in settings:
            if name == "C" and _is_coding(setting):
                continue
            _check_setting(setting, limited=name in LEARNING)


def _column(node: ast.expr) -> str | None:
    """Return the name of a column written plainly or as ``Q("name")``."""
    return node.id if isinstance(node, ast.Name) else quoted_name(node)


def _function(node: ast.expr) -> str | None:
    """Return the listed transform that is called, or None."""
    if isinstance(node, ast.Name) and (node.id in ELEMENTWISE or node.id in (*LEARNING, "C", "I")):
        return node.id
    if isinstance(node, ast.Attribute) and isinstance(node.value, ast.Name) and node.value.id == "np":
        return node.attr if node.attr in ELEMENTWISE else None
    return None


def _is_coding(node: ast.expr) -> bool:
    """Whether a node is a coding of categories such as ``Sum`` or ``Treatment("a")``."""
    if isinstance(node, ast.Name):
        return node.id in CODINGS
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id in CODINGS:
        for setting in (*node.args, *(keyword.value for keyword in node.keywords)):
            _check_setting(setting, limited=False)
        return True
    return False


def _check_power(base: ast.expr, exponent: ast.expr) -> None:
    """Refuse powers that can grow without bound before any column is met."""
    if isinstance(exponent, ast.UnaryOp) and isinstance(exponent.op, ast.USub | ast.UAdd):
        exponent = exponent.operand
    if not (isinstance(exponent, ast.Constant) and isinstance(exponent.value, int | float)):
        raise _OutsideGrammarError("the exponent of ** must be a number written out")
    if abs(exponent.value) > _LARGEST_POWER:
        raise _OutsideGrammarError(f"the exponent of ** exceeds {_LARGEST_POWER}")
    if not any(isinstance(node, ast.Name) for node in ast.walk(base)):
        raise _OutsideGrammarError("the base of ** must hold a column")


def _check_setting(node: ast.expr, *, limited: bool) -> None:
    """Accept constants and lists of constants as settings of a transform."""
    match node:
        case ast.Constant(value=bool() | float() | str() | None):
            return
        case ast.Constant(value=int(number)):
            if limited and number > _LARGEST_SETTING:
                raise _OutsideGrammarError(f"the setting {number} of a transform exceeds {_LARGEST_SETTING}")
        case ast.UnaryOp(op=ast.USub(), operand=operand):
            _check_setting(operand, limited=limited)
        case ast.List(elts=elements) | ast.Tuple(elts=elements):
            for element in elements:
                _check_setting(element, limited=False)
        case _:
            raise _OutsideGrammarError(f"{ast.unparse(node)} is not a constant setting")
