"""Decide how each factor of a formula is to be read."""

from __future__ import annotations

import ast
import builtins
from collections.abc import Callable, Collection, Mapping

import patsy.builtins
from patsy import EvalEnvironment, EvalFactor

from mixbridge.errors import FormulaError
from mixbridge.panel.attempt import Reading
from mixbridge.panel.columns import Column
from mixbridge.panel.formula import Formula, called_names, columns_of, names_of, quoted_name
from mixbridge.panel.grammar import ALLOWED, NAMESPACE, violation
from mixbridge.panel.syntax import tree_of

__all__ = ["factor_columns", "make_environment", "read_factors"]

_BASE = {**{name: getattr(patsy.builtins, name) for name in patsy.builtins.__all__}, **NAMESPACE}


def make_environment(env: int | EvalEnvironment | None, reference: int) -> EvalEnvironment:
    """Return where a formula looks up what is not a column.

    Parameters
    ----------
    env : int, patsy.EvalEnvironment or None
        How many calls up the stack the caller's names are; None for no caller's names at all.
    reference : int
        Calls between here and the function whose caller is meant by 0.
    """
    outer = EvalEnvironment([{}]) if env is None else EvalEnvironment.capture(env, reference=reference + 1)
    return outer.with_outer_namespace(_BASE)


def factor_columns(
    formula: Formula, available: Collection[object], environment: EvalEnvironment, *, trusted: bool
) -> dict[EvalFactor, tuple[str, ...]]:
    """Return the columns each factor reads, outcome first.

    Raises
    ------
    FormulaError
        If a name is unknown or, for a formula that is not trusted, an expression is outside the grammar.
    """
    reads = {}
    for factor in (formula.outcome, *formula.factors):
        known = _known(factor, environment, trusted=trusted)
        reads[factor] = names = columns_of(factor, available, known, formula.text)
        if not trusted:
            _refuse(violation(factor.code, names, names), factor)
    return reads


def _known(factor: EvalFactor, environment: EvalEnvironment, *, trusted: bool) -> Callable[[str], bool]:
    """Return the test for names that need not be columns."""
    if not trusted:
        allowed = called_names(factor.code) | set(_BASE)
        return allowed.__contains__
    return lambda name: name in environment.namespace or hasattr(builtins, name)


def _refuse(reason: str | None, factor: EvalFactor) -> None:
    if reason is not None:
        raise FormulaError(
            f"{factor.code} is not accepted here: {reason}. A formula from the command line or another "
            "untrusted place may use columns, numbers, text to compare with, + - * / ** and one comparison "
            f"at a time, and these transforms: {ALLOWED}."
        )


def read_factors(
    reads: Mapping[EvalFactor, tuple[str, ...]],
    columns: Mapping[str, Column],
    environment: EvalEnvironment,
    *,
    trusted: bool,
) -> list[Reading]:
    """Decide for each factor whether it is a column, a coded column, works row by row, or none of these.

    Parameters
    ----------
    reads : mapping
        Columns of each factor.
    columns : mapping
        The columns.
    environment : patsy.EvalEnvironment
        Where functions are looked up; a listed name that the caller has given another meaning is not trusted
        to
        work row by row.
    trusted : bool
        Whether expressions outside the grammar are accepted.
    """
    readings = []
    for factor, names in reads.items():
        own = {name: columns[name] for name in names}
        numeric = [name for name in names if own[name].kind in ("number", "truth")]
        reason = violation(factor.code, names, numeric)
        if not trusted:
            _refuse(reason, factor)
        functions = [name for name in names_of(factor.code) if name not in own]
        by_row = reason is None and all(
            environment.namespace.get(name) is _BASE.get(name) for name in functions
        )
        single, coded = _single(factor.code, own)
        if coded and environment.namespace.get("C") is not _BASE["C"]:
            single, coded = None, False
        readings.append(Reading(factor, own, single, coded, by_row))
    return readings


def _single(code: str, columns: Mapping[str, Column]) -> tuple[str | None, bool]:
    """Return the column that a factor or the first argument of its ``C`` is, and whether there is a ``C``."""
    node: ast.expr = tree_of(code)
    coded = isinstance(node, ast.Call) and isinstance(node.func, ast.Name) and node.func.id == "C"
    if (
        coded
        and isinstance(node, ast.Call)
        and node.args
        and set(names_of(ast.unparse(node.args[0]))) <= set(columns)
    ):
        node = node.args[0]
    name = node.id if isinstance(node, ast.Name) else quoted_name(node)
    return (name, coded) if name in columns else (None, False)
