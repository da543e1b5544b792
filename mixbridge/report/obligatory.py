"""Sentences that never get lost: one list, each with the claim it guards and the condition under which it is said.

They are composed from the numbers of a record and stand, word for word, at every length, for every audience
and in every
format of the appendix.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from mixbridge.report.words import count, num

__all__ = ["FEW_UNITS", "SENTENCES", "Sentence", "sentences_for"]

FEW_UNITS = 30
"""Units below which references are called rough (common practice)."""

LEVEL = 0.05
"""Level at which a contrast test is said to reject or not."""

Record = Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Sentence:
    """One obligatory sentence.

    Attributes
    ----------
    key : str
    guards : str
        The claim that it limits.
    say : callable
        Takes a record; returns the sentence, or None where the claim is not made.
    """

    key: str
    guards: str
    say: Callable[[Record], str | None]


def _together(record: Record) -> str:
    summary = record["summary"]
    differ = summary["other_routes_visible"] + summary["other_routes_conflicting"]
    if differ == 0:
        first = "The random-effects routes agree with the primary one in every term, "
    else:
        first = "The random-effects routes do not all agree with the primary one, "
    return (
        f"{first}and all of them share one covariance model: they agree together when it is wrong, so "
        "that agreement is no "
        "evidence for the model."
    )


def _arithmetic(record: Record) -> str | None:
    summary = record["summary"]
    if summary["identities_fail"]:
        return (
            f"{count(summary['identities_fail'], 'identity', 'identities')} that must hold "
            f"{'fails' if summary['identities_fail'] == 1 else 'fail'}: the arithmetic on these data "
            "cannot be relied on "
            "until the reason is found."
        )
    if not summary["identities_hold"]:
        return None
    return (
        f"{count(summary['identities_hold'], 'identity', 'identities')} of theory hold on these data; "
        "they check the "
        "arithmetic, not the model."
    )


def _contrast(record: Record) -> str | None:
    rows = record["contrasts"].get("rows", [])
    row = next(
        (
            row
            for row in rows
            if row["contrast"] == "within - gls" and row["variance"] == "one idiosyncratic variance"
        ),
        None,
    )
    if row is None or not isinstance(row["p_value"], float):
        return None
    p = num(row["p_value"], 3)
    if row["p_value"] <= LEVEL:
        return (
            f"The contrast of within and generalised least-squares slopes rejects (p = {p}): the two "
            "differ by more than "
            "sampling error, which does not say why and does not make the within slopes causal."
        )
    return (
        f"The contrast of within and generalised least-squares slopes does not reject (p = {p}); not "
        "rejecting proves "
        "nothing, in particular not that unit effects are unrelated to the covariates."
    )


def _pretest(record: Record) -> str:
    return (
        "Testing first and choosing the estimator by the result distorts size and coverage (Guggenberger "
        "2010); no test "
        "here chose one."
    )


def _contextual(record: Record) -> str | None:
    if record["added"] is None and record["unit_means"]["status"] != "computed":
        return None
    return (
        "Contextual coefficients are not causal, and unit means do not cure time-varying confounding, "
        "reverse causality or "
        "measurement error."
    )


def _causal(record: Record) -> str:
    return (
        "Coefficients are associations given the covariates in the model; causal claims need more "
        "than this analysis."
    )


def _icc(record: Record) -> str | None:
    fit = record["fits"][record["primary"]]
    if not isinstance(fit["icc"], float) or fit["ratio"] == "inf":
        return None
    return (
        f"The intraclass correlation, {num(fit['icc'], 3)}, is conditional on the covariates: it "
        "changes with them."
    )


def _kurtosis(record: Record) -> str | None:
    if record["component_intervals"]["status"] != "computed":
        return None
    return (
        "Intervals and standard errors of the variance components rest on normality and are fragile to "
        "kurtosis, also those "
        "called exact."
    )


def _units(record: Record) -> str:
    units = record["accounting"]["units"]
    if units < FEW_UNITS:
        return (
            f"There are {count(units, 'unit')}: few, so that every reference that is not exact is rough, "
            "most of all for "
            "covariates that vary between units."
        )
    return (
        f"There are {count(units, 'unit')}; what varies between units rests on that number, not on the "
        "number of rows."
    )


def _dropped(record: Record) -> str:
    account = record["accounting"]
    causes = account["dropped"]
    if causes:
        lost = ", ".join(f"{rows} {cause} ({column})" for cause, column, rows in causes)
        first = f"Of {account['rows_given']} rows {account['rows_used']} were used; dropped: {lost}."
    else:
        first = f"All {account['rows_used']} rows were used."
    one = account["one_row_units"]
    if one:
        verb = "has one row and tells" if one == 1 else "have one row and tell"
        first += f" {count(one, 'unit')} {verb} nothing about within variation."
    return first


def _size(record: Record) -> str | None:
    sizes = record["moments"]["sizes"]
    if len(sizes) < 2:
        return None
    return (
        f"Units have from {sizes[0]} to {sizes[-1]} rows; unit size may carry information, and routes "
        "weight large and "
        "small units differently."
    )


def _zero(record: Record) -> str | None:
    fit = record["fits"][record["primary"]]
    if fit["ratio"] != 0.0 or record["primary"] == "pooled":
        return None
    raw = fit["unit_variance_raw"]
    start = (
        f"The estimate of the unit variance came out below zero ({num(raw)}) and zero was used"
        if isinstance(raw, float) and raw < 0.0
        else "The estimate of the unit variance is zero"
    )
    return (
        f"{start}; at zero, small-sample adjustments are not defined as usual, and zero is not known "
        "to be the truth."
    )


def _negative(record: Record) -> str:
    return "A negative correlation within units lies outside the model."


def _scope(record: Record) -> str:
    return (
        "Sampling weights, binary and count outcomes, and random slopes are outside the scope of this "
        "analysis."
    )


def _verified(record: Record) -> str:
    return (
        "That a record is verified shows that its figures follow from its moments, not that the "
        "moments are honest."
    )


def _health(record: Record) -> str:
    return "Where decisions touch health or safety, qualified review comes first."


SENTENCES: tuple[Sentence, ...] = (
    Sentence("together", "routes agree, or do not", _together),
    Sentence("arithmetic", "identities hold", _arithmetic),
    Sentence("contrast", "a contrast test rejects, or does not", _contrast),
    Sentence("pretest", "a test is shown beside estimators", _pretest),
    Sentence("contextual", "unit means are in the model", _contextual),
    Sentence("causal", "a coefficient is printed", _causal),
    Sentence("icc", "an intraclass correlation is printed", _icc),
    Sentence("kurtosis", "an interval of a variance is printed", _kurtosis),
    Sentence("units", "a reference distribution is used", _units),
    Sentence("dropped", "rows were used", _dropped),
    Sentence("size", "units differ in size", _size),
    Sentence("zero", "the unit variance is estimated as zero", _zero),
    Sentence("negative", "the unit variance is a variance", _negative),
    Sentence("scope", "the model fits the question", _scope),
    Sentence("verified", "the record can be verified", _verified),
    Sentence("health", "somebody decides by this", _health),
)
"""All of them, in the order in which they are printed."""


def sentences_for(record: Record) -> tuple[str, ...]:
    """Return the obligatory sentences of a record.

    Parameters
    ----------
    record : mapping
        What `Study.to_dict` returns.
    """
    found = (sentence.say(record) for sentence in SENTENCES)
    return tuple(text for text in found if text is not None)
