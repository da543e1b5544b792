"""What an identity is, and the register of all of them.

A new identity is one function with the decorator `identity`. It takes a `Setting` and returns `Compared`
(its condition holds: here are
two numbers from two computations) or `Unmet` (its condition does not hold: which one).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

from mixbridge.reconcile.identities.setting import Setting

__all__ = [
    "DOES_NOT_APPLY",
    "FAILS",
    "HOLDS",
    "REGISTRY",
    "Compared",
    "Identity",
    "Rule",
    "Unmet",
    "identity",
    "result",
]

TELLING = 1e-2
"""Tolerance above which neither agreement nor difference says anything: the columns leave too few digits."""

HOLDS, DOES_NOT_APPLY, FAILS = "holds", "does not apply", "FAILS"


@dataclass(frozen=True, slots=True)
class Identity:
    """One identity on given data.

    Attributes
    ----------
    key : str
        Name of the check; an identity of the design may have several.
    number : int
        Number of the identity.
    name, statement, source : str
        In words: title, what must be equal, where it was first shown.
    verdict : str
        ``holds``, ``does not apply`` or ``FAILS``.
    condition : str
        Which condition was tested; where the identity does not apply: which one fails.
    left, right : float
        The two numbers: where many are compared, those that are furthest apart for their tolerance.
    left_name, right_name : str
        What they are and how each was computed.
    difference : float
        Distance of the two sides, relative to the size named in `tolerance_reason`.
    tolerance : float
        Largest distance that rounding explains.
    tolerance_reason : str
        How the tolerance was derived.
    """

    key: str
    number: int
    name: str
    statement: str
    source: str
    verdict: str
    condition: str
    left: float = float("nan")
    right: float = float("nan")
    left_name: str = ""
    right_name: str = ""
    difference: float = float("nan")
    tolerance: float = float("nan")
    tolerance_reason: str = ""


@dataclass(frozen=True, slots=True)
class Compared:
    """Two sides of an identity whose condition holds; fields as in `Identity`."""

    condition: str
    left: float
    right: float
    left_name: str
    right_name: str
    difference: float
    tolerance: float
    tolerance_reason: str


@dataclass(frozen=True, slots=True)
class Unmet:
    """The condition that does not hold."""

    condition: str


Check = Callable[[Setting], Compared | Unmet]


@dataclass(frozen=True, slots=True)
class Rule:
    """An identity before it meets data: fields as in `Identity`, and the function that checks it."""

    key: str
    number: int
    name: str
    statement: str
    source: str
    check: Check


REGISTRY: dict[str, Rule] = {}
"""Every identity by key."""


def identity(*, number: int, name: str, statement: str, source: str) -> Callable[[Check], Check]:
    """Register a function as the check of an identity, under the name of the function."""

    def register(check: Check) -> Check:
        key = check.__name__
        if key in REGISTRY:
            raise ValueError(f"two identities are called {key!r}")
        REGISTRY[key] = Rule(key, number, name, statement, source, check)
        return check

    return register


def result(rule: Rule, setting: Setting) -> Identity:
    """Check one rule: it holds if the distance is a number not above the tolerance, itself small enough to tell."""
    outcome = rule.check(setting)
    about = (rule.key, rule.number, rule.name, rule.statement, rule.source)
    if isinstance(outcome, Unmet):
        return Identity(*about, DOES_NOT_APPLY, outcome.condition)
    if outcome.tolerance > TELLING:
        few = f"digits left to compare: rounding alone could make a difference of {outcome.tolerance:.2g}"
        return Identity(*about, DOES_NOT_APPLY, few)
    return Identity(
        *about,
        HOLDS if outcome.difference <= outcome.tolerance else FAILS,
        outcome.condition,
        float(outcome.left),
        float(outcome.right),
        outcome.left_name,
        outcome.right_name,
        float(outcome.difference),
        float(outcome.tolerance),
        outcome.tolerance_reason,
    )
