"""Read a formula: the outcome, the terms, and the columns they need."""

from __future__ import annotations

import ast
import tokenize
from collections.abc import Callable, Collection
from dataclasses import dataclass
from io import StringIO

from patsy import EvalFactor, ModelDesc, PatsyError, Term

from mixbridge.errors import FormulaError, nearest
from mixbridge.panel.syntax import tree_of

__all__ = ["Formula", "called_names", "columns_of", "names_of", "parse_formula", "quoted_name"]


@dataclass(frozen=True, slots=True)
class Formula:
    """A parsed formula.

    Parameters
    ----------
    text : str
        As given.
    outcome : patsy.EvalFactor
        The left side.
    terms : tuple of patsy.Term
        The right side; the intercept is the term without factors.
    """

    text: str
    outcome: EvalFactor
    terms: tuple[Term, ...]

    @property
    def factors(self) -> tuple[EvalFactor, ...]:
        """The distinct factors of the right side, in order of appearance."""
        return tuple(dict.fromkeys(factor for term in self.terms for factor in term.factors))


def parse_formula(text: str) -> Formula:
    """Parse a formula with one outcome.

    Raises
    ------
    FormulaError
        If it cannot be read, has no outcome or several, no column on the right, or a vertical bar.
    """
    if not isinstance(text, str):
        raise FormulaError(f"The formula is a {type(text).__name__}; needed is text such as 'y ~ x1 + x2'.")
    _refuse_bar(text)
    try:
        desc = ModelDesc.from_formula(text)
    except PatsyError as error:
        raise FormulaError(f"The formula cannot be read: {error}") from error
    except (SyntaxError, tokenize.TokenError, RecursionError) as error:
        raise FormulaError(f"The formula {text!r} cannot be read: {error}") from error
    if "~" not in text or not desc.lhs_termlist:
        raise FormulaError(
            f"The formula {text!r} has no left side. Write the outcome first: 'outcome ~ "
            f"{text.strip(' ~') or 'x'}'."
        )
    outcome = desc.lhs_termlist[0]
    if len(desc.lhs_termlist) > 1 or len(outcome.factors) != 1:
        written = " and ".join(term.name() for term in desc.lhs_termlist)
        raise FormulaError(
            f"The formula {text!r} needs one outcome on its left side, not {written}. Fit each outcome in a "
            "call of its own; for a sum or product write I(a + b)."
        )
    if not desc.rhs_termlist:
        raise FormulaError(
            f"The formula {text!r} has nothing on its right side: no intercept and no covariate."
        )
    formula = Formula(text, outcome.factors[0], tuple(desc.rhs_termlist))
    for factor in (formula.outcome, *formula.factors):
        _check_python(factor, text)
    return formula


def _refuse_bar(text: str) -> None:
    """Refuse ``x | group`` and ``(1 | group)``; a bar inside a call such as ``I(a | b)`` is Python's."""
    inside: list[bool] = []
    before = ""
    try:
        for token in tokenize.generate_tokens(StringIO(text).readline):
            if token.string in "([{" and token.string:
                inside.append(token.string != "(" or before.isidentifier())
            elif token.string in ")]}" and token.string and inside:
                inside.pop()
            elif token.string == "|" and not any(inside):
                raise FormulaError(
                    f"The formula {text!r} has a vertical bar at character {token.start[1] + 1}. The "
                    "formula holds the fixed part only; the grouping factor is the named argument unit, "
                    "for example crosscheck('y ~ x', data, unit='group')."
                )
            before = token.string
    except (tokenize.TokenError, SyntaxError):
        return  # patsy's own message about the place follows


def _check_python(factor: EvalFactor, text: str) -> None:
    """Refuse a factor that is not one Python expression, at its place in the formula."""
    try:
        tree_of(factor.code)
    except (SyntaxError, RecursionError) as error:
        place = factor.origin.caretize(indent=4) if factor.origin is not None else f"    {text}"
        raise FormulaError(
            f"This part of the formula is not an expression: {factor.code}\n{place}\nAn operator may be "
            "missing; a column whose name is not a plain Python name is written Q('its name')."
        ) from error


def names_of(code: str) -> tuple[str, ...]:
    """Return the names that an expression reads, ``Q("...")`` included, those it binds itself excluded."""
    tree = tree_of(code)
    names: dict[str, None] = {}
    bound = {node.arg for node in ast.walk(tree) if isinstance(node, ast.arg)}
    bound |= {
        node.id
        for node in ast.walk(tree)
        if isinstance(node, ast.Name) and not isinstance(node.ctx, ast.Load)
    }
    for node in ast.walk(tree):
        quoted = quoted_name(node)
        if quoted is not None:
            names[quoted] = None
        elif isinstance(node, ast.Name) and node.id not in bound:
            names[node.id] = None
    return tuple(names)


def quoted_name(node: ast.AST) -> str | None:
    """Return the name inside ``Q("name")``, or None for any other node."""
    if (
        isinstance(node, ast.Call)
        and isinstance(node.func, ast.Name)
        and node.func.id == "Q"
        and len(node.args) == 1
    ):
        argument = node.args[0]
        if isinstance(argument, ast.Constant) and isinstance(argument.value, str):
            return argument.value
    return None


def called_names(code: str) -> set[str]:
    """Return the names that an expression calls, the first one of dotted names."""
    called = set()
    for node in ast.walk(tree_of(code)):
        if isinstance(node, ast.Call):
            target = node.func
            while isinstance(target, ast.Attribute):
                target = target.value
            if isinstance(target, ast.Name):
                called.add(target.id)
    return called


def columns_of(
    factor: EvalFactor, available: Collection[object], known: Callable[[str], bool], text: str
) -> tuple[str, ...]:
    """Return the columns that a factor reads.

    A name that is only called, such as ``log`` in ``log(x)``, is a function even if a column has the same
    name.

    Parameters
    ----------
    factor : patsy.EvalFactor
        A factor of the formula.
    available : collection
        Column names of the data.
    known : callable
        Tells the names that need not be columns: functions, and in a library call what the caller can see.
    text : str
        The formula, for the message.

    Raises
    ------
    FormulaError
        If it reads a name that is neither.
    """
    tree = tree_of(factor.code)
    called = [
        node.func.id
        for node in ast.walk(tree)
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Name)
    ]
    found = []
    for name in names_of(factor.code):
        if name in called and known(name):
            times = sum(isinstance(node, ast.Name) and node.id == name for node in ast.walk(tree))
            if name in available and times > called.count(name):
                raise FormulaError(
                    f"In {factor.code!r} the name {name!r} is both a function and a column. Rename the "
                    "column."
                )
        elif name in available:
            found.append(name)
        elif not known(name):
            raise FormulaError(
                f"The formula {text!r} names {name!r}, which is not a column of the data."
                + nearest(name, [str(column) for column in available])
                + f" Columns: {_listed(available)}."
            )
    return tuple(found)


def _listed(available: Collection[object]) -> str:
    names = [str(column) for column in available]
    return ", ".join(names[:12]) + (f" and {len(names) - 12} more" if len(names) > 12 else "")
