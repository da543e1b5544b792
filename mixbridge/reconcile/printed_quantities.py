"""Names of printed quantities, and what an ambiguous name can mean.

A *reading* of a quantity is one definite meaning (an *elementary* quantity, which every candidate can compute) with
the choices it rests on. Choices are made along naming axes that several figures share: if ``sigma_u`` is the unit
effect's, it is so in the whole printed set.
"""

from __future__ import annotations

import itertools
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from mixbridge.errors import DataError, OptionError, nearest

__all__ = [
    "QUANTITIES",
    "TERM_KINDS",
    "Group",
    "Naming",
    "Reading",
    "canonical_quantity",
    "groups_of",
    "readings",
]

Naming = tuple[tuple[str, str], ...]
"""Choices by axis."""

TERM_KINDS = {
    "b": "coefficient",
    "se": "standard error",
    "z": "coefficient over its standard error",
    "t": "the same as z",
}

QUANTITIES: Mapping[str, str] = {
    **{f"{kind}:TERM": f"{text} of TERM" for kind, text in TERM_KINDS.items()},
    "unit_variance": "variance of the unit effects",
    "unit_sd": "its square root",
    "idiosyncratic_variance": "variance of the idiosyncratic error",
    "idiosyncratic_sd": "its square root",
    "sigma_a": "of the unit effects, standard deviation or variance",
    "sigma_e": "of the idiosyncratic error, standard deviation or variance",
    "sigma_u": "of either, standard deviation or variance",
    "sigma2_a": "variance of the unit effects",
    "sigma2_e": "variance of the idiosyncratic error",
    "sigma2_u": "variance of either",
    "icc": "share of variance due to units",
    "ratio": "unit variance over idiosyncratic variance",
    "quasi_demeaning": "1 - (1 + T psi)^(-1/2); also with :min, :median, :max",
    "shrinkage": "T psi / (1 + T psi); also with :min, :median, :max",
    "lambda": "either of these or one minus it; also with :min, :median, :max",
    "log_likelihood": "maximised log-likelihood",
    "minus_2_log_likelihood": "minus twice it",
    "aic": "minus twice it plus twice the number of parameters",
    "bic": "minus twice it plus the logarithm of n or N per parameter",
    "f_unit_intercepts": "F test of equal unit intercepts",
    "lagrange_multiplier": "two-sided score statistic for no unit variance",
    "lagrange_multiplier_one_sided": "its signed root",
    "lagrange_multiplier_standardised": "the same, standardised by exact moments",
    "likelihood_ratio": "likelihood ratio statistic for no unit variance",
    "restricted_likelihood_ratio": "the same from REML",
    "contrast": "chi-square of a contrast of within, GLS and between coefficients",
}
"""Each quantity with its meaning."""

ALIASES = {
    "rho": "icc",
    "psi": "ratio",
    "theta": "lambda",
    "sigma_alpha": "sigma_a",
    "sigma_mu": "sigma_a",
    "sigma_epsilon": "sigma_e",
    "sigma_nu": "sigma_e",
    "sigma2_alpha": "sigma2_a",
    "sigma2_mu": "sigma2_a",
    "sigma2_epsilon": "sigma2_e",
    "sigma2_nu": "sigma2_e",
    "f": "f_unit_intercepts",
    "lm": "lagrange_multiplier",
    "hausman": "contrast",
}
SUMMARIES = ("min", "median", "max")
BY_SIZE = ("quasi_demeaning", "shrinkage", "lambda")
SIGMA = "sigma is"
SIGMA_U = "sigma_u belongs to"
CONTRASTS = tuple(
    [f"within - gls, {variance}" for variance in ("one idiosyncratic variance", "each route's own")]
    + [
        f"{name}, {variance}, between weights {weights}"
        for weights in ("T / (1 + T psi)", "size", "one")
        for variance in ("one idiosyncratic variance", "each route's own")
        for name in ("gls - between", "within - between")
    ]
    + [f"unit means, {variance}" for variance in ("one idiosyncratic variance", "each route's own")]
    + ["unit means, cluster-robust"]
)
"""Forms of a contrast statistic."""


@dataclass(frozen=True, slots=True)
class Reading:
    """One meaning of a quantity.

    Attributes
    ----------
    naming : tuple of (str, str)
        Axis and choice; empty where the name has one meaning.
    key : str
        The elementary quantity.
    """

    naming: Naming
    key: str


@dataclass(frozen=True, slots=True)
class Group:
    """Figures whose names share axes, with every joint reading.

    Attributes
    ----------
    places : tuple of int
        Positions of the figures.
    readings : tuple of (naming, keys)
        Each joint choice with the elementary quantity of each figure.
    """

    places: tuple[int, ...]
    readings: tuple[tuple[Naming, tuple[str, ...]], ...]


def canonical_quantity(name: str, where: str = "") -> str:
    """Return the name of a quantity as used here.

    Parameters
    ----------
    name : str
        A key of `QUANTITIES` or an alias, with a term after a colon where there is one.
    where : str
        Where it stands, for the message.

    Returns
    -------
    str

    Raises
    ------
    DataError
        If there is no such quantity; the message lists what there is.
    """
    place = f"{where}: " if where else ""
    kind, colon, rest = name.strip().partition(":")
    head, rest = kind.strip().lower(), rest.strip()
    if head.startswith("sigma") and head.endswith(("^2", "²")):
        head = head.replace("sigma", "sigma2", 1).removesuffix("^2").removesuffix("²")
    head = ALIASES.get(head, head)
    if head in TERM_KINDS:
        if not rest:
            raise DataError(f"{place}{name!r} needs a term, as in '{head}:forage'.")
        return f"{head}:{rest}"
    known = [each for each in QUANTITIES if ":" not in each]
    if head not in known:
        terms = ", ".join(f"{each}:TERM" for each in TERM_KINDS)
        raise DataError(
            f"{place}{name!r} is no quantity; there are: {terms}, {', '.join(known)}." + nearest(head, known)
        )
    if not colon:
        return head
    if head not in BY_SIZE or rest not in SUMMARIES:
        allowed = (
            f"only {', '.join(BY_SIZE)} have min, median and max"
            if head not in BY_SIZE
            else "min, median, max"
        )
        raise DataError(f"{place}{name!r}: nothing called {rest!r} here; {allowed}.")
    return f"{head}:{rest}"


def match_terms(quantity: str, terms: Sequence[str]) -> str:
    """Return a quantity with its term spelled as in the study; the case of letters need not agree."""
    kind, _, term = quantity.partition(":")
    if kind not in TERM_KINDS or term in terms:
        return quantity
    close = [each for each in terms if each.lower() == term.lower()]
    if len(close) == 1:
        return f"{kind}:{close[0]}"
    raise OptionError.not_among(f"term of figure {quantity!r}", term, terms)


def readings(quantity: str, balanced: bool) -> tuple[Reading, ...]:
    """Return every meaning of a quantity.

    Parameters
    ----------
    quantity : str
        Canonical name.
    balanced : bool
        Whether all units have one size, so that a single weight needs no summary.
    """
    kind, _, rest = quantity.partition(":")
    if kind in ("z", "t"):
        return (Reading((), f"t:{rest}"),)
    if kind in BY_SIZE:
        return _by_size(kind, rest, balanced)
    if kind.startswith("sigma"):
        return _sigma(kind)
    return FEW.get(kind, (Reading((), quantity),))


PARAMETERS = ("coefficients and variances", "coefficients", "variances")
"""What a penalty counts."""
FEW: Mapping[str, tuple[Reading, ...]] = {
    "aic": tuple(Reading((("parameters", count),), f"aic:{count}") for count in PARAMETERS),
    "bic": tuple(
        Reading((("parameters", count), ("penalty", by)), f"bic:{count}:{by}")
        for count in PARAMETERS
        for by in ("log n", "log N")
    ),
    "contrast": tuple(Reading((("contrast", form),), f"contrast:{form}") for form in CONTRASTS),
}
"""Readings of the criteria and of contrasts."""


def _by_size(kind: str, summary: str, balanced: bool) -> tuple[Reading, ...]:
    meanings = {
        "lambda": ("quasi_demeaning", "one minus quasi_demeaning", "shrinkage", "one minus shrinkage"),
    }.get(kind, (kind,))
    if balanced:
        places: tuple[str, ...] = ("min",)
    elif summary == "median":
        places = ("median over units", "median over rows")
    elif summary:
        places = (summary,)
    else:
        places = (
            "at the mean size",
            "at the harmonic mean size",
            "mean over units",
            "median over units",
            "median over rows",
        )
    found = []
    for meaning in meanings:
        for at in places:
            naming: Naming = (("lambda is", meaning),) if len(meanings) > 1 else ()
            if len(places) > 1:
                axis = "median lambda is" if summary else "single lambda is"
                naming = (*naming, (axis, at))
            found.append(Reading(naming, f"{meaning}:{at}"))
    return tuple(found)


def _sigma(kind: str) -> tuple[Reading, ...]:
    form, _, letter = kind.partition("_")
    whose = {"a": ("unit",), "e": ("idiosyncratic",), "u": ("unit", "idiosyncratic")}[letter]
    measures = ("variance",) if form == "sigma2" else ("sd", "variance")
    found = []
    for owner in whose:
        for measure in measures:
            naming: Naming = ((SIGMA_U, owner),) if len(whose) > 1 else ()
            if len(measures) > 1:
                naming = (*naming, (SIGMA, measure))
            found.append(Reading(naming, f"{owner}_{measure}"))
    return tuple(found)


def groups_of(quantities: Sequence[str], balanced: bool) -> tuple[Group, ...]:
    """Join figures whose readings share axes, and list the joint readings of each group.

    A joint reading in which two figures would be the same elementary quantity is left out where another is left.
    """
    each = [readings(quantity, balanced) for quantity in quantities]
    axes = [{axis for reading in found for axis, _ in reading.naming} for found in each]
    left, groups = list(range(len(each))), []
    while left:
        places, shared = [left.pop(0)], set(axes[0])
        shared = set(axes[places[0]])
        grown = True
        while grown:
            grown = False
            for place in list(left):
                if axes[place] & shared:
                    places.append(place)
                    shared |= axes[place]
                    left.remove(place)
                    grown = True
        groups.append(_joint(tuple(sorted(places)), each))
    return tuple(groups)


def _joint(places: tuple[int, ...], each: list[tuple[Reading, ...]]) -> Group:
    found: list[tuple[Naming, tuple[str, ...]]] = []
    for chosen in itertools.product(*(each[place] for place in places)):
        choices: dict[str, str] = {}
        if all(choices.setdefault(axis, choice) == choice for one in chosen for axis, choice in one.naming):
            found.append((tuple(choices.items()), tuple(one.key for one in chosen)))
    distinct = [item for item in found if len(set(item[1])) == len(places)]
    return Group(places, tuple(distinct or found))
