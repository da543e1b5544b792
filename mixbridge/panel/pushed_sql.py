"""A factor of a formula as SQL, where a database computes the same number as this package does.

Every expression is guarded so that what is not a number here is not a number there, whatever the database does by
default: logarithms and roots of negative numbers, powers of them with a fraction, and divisions by zero.
"""

from __future__ import annotations

import ast
from collections.abc import Mapping
from dataclasses import dataclass

from mixbridge.panel.formula import quoted_name
from mixbridge.panel.syntax import tree_of
from mixbridge.sources.duckdb_source import quoted

__all__ = ["FactorSQL", "NotInSQLError", "case_of", "factor_sql", "literal", "number_literal"]

NUMBERS = frozenset(
    (
        *("tinyint", "smallint", "integer", "bigint", "hugeint"),
        *("utinyint", "usmallint", "uinteger", "ubigint", "uhugeint"),
        *("float", "double", "decimal"),
    )
)
FLOATS = frozenset(("float", "double"))
LABELS = frozenset(("varchar", "boolean", "enum"))

_NAN = "CAST('nan' AS DOUBLE)"
_INFINITE = "CAST('inf' AS DOUBLE)"
_LONGEST = 20_000
"""Characters of an expression: each guard repeats its argument."""
_LOGARITHMS = {"log": "ln", "log2": "log2", "log10": "log10"}


class NotInSQLError(Exception):
    """Carries the reason why something is not written in SQL."""


@dataclass(frozen=True, slots=True)
class FactorSQL:
    """A factor in SQL.

    Parameters
    ----------
    code : str
        As in the formula.
    number : str or None
        A double that is NaN where the factor is not a number.
    column : str or None
        The column, where the factor is nothing else or, if `coded`, ``C`` of it.
    coded : bool
    """

    code: str
    number: str | None
    column: str | None
    coded: bool = False

    @property
    def evaluated(self) -> bool:
        """Whether the factor can fail to be a number where its columns are numbers."""
        return self.number is not None and self.column is None


def factor_sql(code: str, types: Mapping[str, str]) -> FactorSQL:
    """Write a factor in SQL.

    Parameters
    ----------
    code : str
        The factor.
    types : mapping of str to str
        Type of each column it reads, in the database's words.

    Raises
    ------
    NotInSQLError
        If it is anything but a column, ``C`` of a column, or arithmetic and transforms of numeric columns.
    """
    node = tree_of(code)
    name = _column(node)
    if name is not None and name in types:
        kind = types[name]
        if kind in NUMBERS:
            return FactorSQL(code, _double(name), name)
        if kind in LABELS:
            return FactorSQL(code, None, name)
        raise NotInSQLError(f"the column {name!r} is of the type {kind}")
    if isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "C" and node.args:
        name = _column(node.args[0])
        if name is not None and types.get(name) in LABELS | (
            NUMBERS - {"decimal"}
        ):  # levels must compare exactly
            return FactorSQL(code, None, name, coded=True)
    number = _number(node, types)
    if len(number) > _LONGEST:
        raise NotInSQLError(f"{code} is nested too deeply")
    return FactorSQL(code, number, None)


def _column(node: ast.expr) -> str | None:
    return node.id if isinstance(node, ast.Name) else quoted_name(node)


def _double(name: str) -> str:
    return f"CAST({quoted(name)} AS DOUBLE)"


def number_literal(value: float) -> str:
    """Return a double as SQL that is read back as the same number."""
    return f"CAST('{float(value)!r}' AS DOUBLE)"


def literal(value: object) -> str:
    """Return a level as SQL.

    Raises
    ------
    NotInSQLError
        If it is not text, a truth value or a number.
    """
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, int):
        return str(value)
    if isinstance(value, float):
        return number_literal(value)
    if isinstance(value, str) and "\0" not in value:
        return "'" + value.replace("'", "''") + "'"
    raise NotInSQLError(f"the level {value!r} is neither text nor a number")


def case_of(factor: FactorSQL, levels: Mapping[object, float]) -> str:
    """Return a number for each level of a categorical factor as SQL; zeros need no line."""
    assert factor.column is not None, "a categorical factor is a column"
    lines = [
        f"WHEN {quoted(factor.column)} = {literal(level)} THEN {number_literal(value)}"
        for level, value in levels.items()
        if value != 0.0
    ]
    zero = number_literal(0.0)
    return f"CASE {' '.join(lines)} ELSE {zero} END" if lines else zero


def _number(node: ast.expr, types: Mapping[str, str]) -> str:
    name = _column(node)
    if name is not None and types.get(name) in NUMBERS:
        return _double(name)
    if name is not None:
        raise NotInSQLError(f"{name} does not hold numbers")
    match node:
        case ast.Constant(value=int() | float() as value) if not isinstance(value, bool):
            return number_literal(value)
        case ast.UnaryOp(op=ast.USub(), operand=operand):
            return f"(-{_number(operand, types)})"
        case ast.UnaryOp(op=ast.UAdd(), operand=operand):
            return _number(operand, types)
        case ast.BinOp(left=left, op=operator, right=right):
            return _operation(_number(left, types), operator, right, types)
        case ast.Call(args=[argument], keywords=[]):
            return _call(node, _number(argument, types))
    raise NotInSQLError(f"{ast.unparse(node)} is not arithmetic or a transform that SQL has")


def _operation(left: str, operator: ast.operator, exponent: ast.expr, types: Mapping[str, str]) -> str:
    if isinstance(operator, ast.Pow):
        return _power(left, exponent)
    right = _number(exponent, types)
    signs: dict[type[ast.operator], str] = {ast.Add: "+", ast.Sub: "-", ast.Mult: "*"}
    if type(operator) in signs:
        return f"({left} {signs[type(operator)]} {right})"
    if isinstance(operator, ast.Div):
        by_zero = f"CASE WHEN {left} = 0 OR isnan({left}) THEN {_NAN} ELSE {_INFINITE} END"
        return f"(CASE WHEN {right} = 0 THEN {by_zero} ELSE {left} / {right} END)"
    raise NotInSQLError(f"the operator {type(operator).__name__} is not written in SQL")


def _power(base: str, exponent: ast.expr) -> str:
    try:
        power = ast.literal_eval(exponent)
    except ValueError as error:
        raise NotInSQLError("an exponent is not a number written out") from error
    if isinstance(power, bool) or not isinstance(power, int | float):
        raise NotInSQLError("an exponent is not a number written out")
    if power == 2:
        return f"({base} * {base})"
    value = f"pow({base}, {number_literal(power)})"
    if float(power).is_integer():
        if power >= 0:
            return value
        return f"(CASE WHEN {base} = 0 THEN {_INFINITE} ELSE {value} END)"
    at_zero = number_literal(0.0) if power > 0 else _INFINITE
    return (
        f"(CASE WHEN isnan({base}) OR {base} < 0 THEN {_NAN} WHEN {base} = 0 THEN {at_zero} ELSE {value} END)"
    )


def _call(node: ast.Call, argument: str) -> str:
    name = None
    if isinstance(node.func, ast.Name):
        name = node.func.id
    elif (
        isinstance(node.func, ast.Attribute)
        and isinstance(node.func.value, ast.Name)
        and node.func.value.id == "np"
    ):
        name = node.func.attr
    if name == "I":
        return argument
    if name in _LOGARITHMS:
        return (
            f"(CASE WHEN isnan({argument}) OR {argument} < 0 THEN {_NAN} WHEN {argument} = 0 THEN -{_INFINITE} "
            f"ELSE {_LOGARITHMS[name]}({argument}) END)"
        )
    if name == "sqrt":
        return f"(CASE WHEN isnan({argument}) OR {argument} < 0 THEN {_NAN} ELSE sqrt({argument}) END)"
    if name in ("exp", "abs"):
        return f"{name}({argument})"
    raise NotInSQLError(f"{ast.unparse(node.func)} is not a transform that SQL has")
