"""Sentences that never get lost: one list, each with the claim it guards and the condition under which it is said.

They are composed from the numbers of a record and stand, word for word, at every length, for every audience and in
every format of the appendix.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

from mixbridge.report.contrast import contrast_row
from mixbridge.report.words import count, num, said_p
from mixbridge.routes import REFERENCE_ROUTES

__all__ = ["FEW_UNITS", "LEVEL", "SENTENCES", "Sentence", "sentences_for"]

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
    when : str
        The condition on the numbers of the study under which it is said.
    flips : str
        What it becomes when the numbers turn; empty where nothing turns it.
    say : callable
        Takes a record; returns the sentence, or None where the claim is not made.
    """

    key: str
    guards: str
    when: str
    flips: str
    say: Callable[[Record], str | None]


def _together(record: Record) -> str:
    summary = record["summary"]
    if not summary["other_routes"]:
        return (
            "One random-effects route stands alone here; others would share its covariance model and would "
            "agree with it "
            "also when that is wrong, so that agreement is no evidence for the model."
        )
    if summary["other_routes_visible"] + summary["other_routes_conflicting"]:
        first = "The random-effects routes do not all agree with the primary one, "
    elif summary["other_routes_identical"] + summary["other_routes_immaterial"]:
        first = "The random-effects routes agree with the primary one in every term that can be compared, "
    else:
        first = "The random-effects routes cannot be compared with the primary one in any term, "
    return (
        f"{first}and all of them share one covariance model: they agree together when it is wrong, so that "
        "agreement is no "
        "evidence for the model."
    )


def _arithmetic(record: Record) -> str | None:
    hold, fail = record["summary"]["identities_hold"], record["summary"]["identities_fail"]
    if fail:
        return (
            f"{count(fail, 'identity', 'identities')} that must hold {'fails' if fail == 1 else 'fail'}: the "
            "arithmetic on "
            "these data cannot be relied on until the reason is found."
        )
    if not hold:
        return None
    verbs = ("holds", "it checks") if hold == 1 else ("hold", "they check")
    return (
        f"{count(hold, 'identity', 'identities')} of theory {verbs[0]} on these data; {verbs[1]} the "
        "arithmetic, not the "
        "model."
    )


def _contrast(record: Record) -> str | None:
    row = contrast_row(record)
    if row is None:
        return None
    p = f"{said_p(row['p_value'])}, level {LEVEL:g}"
    if row["p_value"] <= LEVEL:
        return (
            f"The contrast of within and generalised least-squares slopes rejects ({p}): the two differ by "
            "more than "
            "sampling error, which does not say why and does not make the within slopes causal."
        )
    return (
        f"The contrast of within and generalised least-squares slopes does not reject ({p}); not rejecting "
        "proves nothing, "
        "in particular not that unit effects are unrelated to the covariates."
    )


def _rejecting(record: Record) -> str:
    found = record["audit"]
    tests, reject = found.get("tests", 0), found.get("tests_rejecting", 0)
    if not tests:
        return "A test that does not reject proves nothing; assumptions that no test looked at are not thereby met."
    if not reject:
        return (
            f"Of {count(tests, 'test')} of assumptions none rejects at {found['level']:g}; that proves "
            "nothing for the "
            "assumptions."
        )
    text = f"Of {count(tests, 'test')} of assumptions {reject} {'rejects' if reject == 1 else 'reject'} at "
    if reject == tests:
        return f"{text}{found['level']:g}; had one not rejected, that would have proved nothing."
    return f"{text}{found['level']:g}; that the others do not proves nothing for the assumptions."


def _pretest(record: Record) -> str:
    return (
        "Testing first and choosing the estimator by the result distorts size and coverage (Guggenberger "
        "2010); this "
        "program chooses none by a test."
    )


def _contextual(record: Record) -> str | None:
    if record["added"] is None and record["unit_means"]["status"] != "computed":
        return None
    return (
        "Contextual coefficients are not causal, and unit means do not cure time-varying confounding, "
        "reverse causality or "
        "measurement error."
    )


def _causal(record: Record) -> str | None:
    if record["inference"]["status"] != "computed":
        return None
    return (
        "Coefficients are associations given the covariates in the model; causal claims need more than this "
        "analysis."
    )


def _icc(record: Record) -> str | None:
    fit = record["fits"][record["primary"]]
    if record["primary"] in REFERENCE_ROUTES or not isinstance(fit["icc"], float):
        return None
    return f"The intraclass correlation, {num(fit['icc'], 3)}, is conditional on the covariates: it changes with them."


def _kurtosis(record: Record) -> str | None:
    rows = record["component_intervals"].get("rows", [])
    if not any(row["lower"] is not None or row["upper"] is not None for row in rows):
        return None
    return (
        "Intervals and standard errors of variances rest on normality and are fragile to kurtosis, also those "
        "called exact."
    )


def _units(record: Record) -> str:
    units = record["accounting"]["units"]
    verb = "is" if units == 1 else "are"
    if units < FEW_UNITS:
        return (
            f"There {verb} {count(units, 'unit')}: few, so that every reference that is not exact is rough, "
            "most of all for "
            "covariates that vary between units."
        )
    return (
        f"There {verb} {count(units, 'unit')}; what varies between units rests on that number, not on the number "
        "of rows."
    )


def _dropped(record: Record) -> str:
    account = record["accounting"]
    causes = account["dropped"]
    if causes:
        lost = ", ".join(f"{rows} {cause} ({column})" for cause, column, rows in causes)
        first = (
            f"Of {account['rows_given']} rows {account['rows_used']} were used; dropped: {lost}. If rows are "
            "missing for "
            "reasons that go with the outcome, every route can be biased."
        )
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
        f"Units have from {sizes[0]} to {sizes[-1]} rows; unit size may carry information, and routes weight "
        "large and "
        "small units differently."
    )


def _zero(record: Record) -> str | None:
    fit = record["fits"][record["primary"]]
    if fit["ratio"] != 0.0 or record["primary"] in REFERENCE_ROUTES:
        return None
    raw = fit["unit_variance_raw"]
    start = (
        f"The estimate of the unit variance came out below zero ({num(raw)}) and zero was used"
        if isinstance(raw, float) and raw < 0.0
        else "The estimate of the unit variance is zero"
    )
    return (
        f"{start}; at zero, small-sample adjustments are not defined as usual, and zero is not known to be the "
        "truth."
    )


def _negative(record: Record) -> str:
    below = record["summary"]["routes_below_zero"]
    start = "A negative correlation within units lies outside the model"
    if not below:
        return f"{start}."
    how_many = f"{below} route estimates" if below == 1 else f"{below} routes estimate"
    return f"{start}; {how_many} a unit variance below zero here, as such a correlation would make it."


def _scope(record: Record) -> str:
    return "Sampling weights, binary and count outcomes, and random slopes are outside the scope of this analysis."


def _matched(record: Record) -> str:
    return (
        "A printed figure that some route here reproduces is compatible with that route; that shows not "
        "where the figure "
        "came from, and never intent."
    )


def _verified(record: Record) -> str:
    return "That a record is verified shows that its figures follow from its moments, not that the moments are honest."


def _disclosure(record: Record) -> str | None:
    if record["influence"]["status"] != "computed":
        return None
    return (
        "No unit is named here: who was influential may disclose a confidential unit, and with few units the "
        "size of its "
        "influence may too."
    )


def _health(record: Record) -> str:
    return "Where decisions touch health or safety, qualified review comes first."


SENTENCES: tuple[Sentence, ...] = (
    Sentence(
        "together",
        "routes agree, or do not",
        "always",
        "says that routes do not all agree where one is visibly apart or in conflict, that one stands alone "
        "where it does",
        _together,
    ),
    Sentence(
        "arithmetic",
        "identities hold",
        "an identity holds or fails",
        "a failing identity takes the place of those that hold",
        _arithmetic,
    ),
    Sentence(
        "contrast",
        "a contrast test rejects, or does not",
        "the contrast of within and GLS slopes has a p value",
        "by the p value against the level",
        _contrast,
    ),
    Sentence(
        "rejecting",
        "tests of assumptions are shown",
        "always",
        "counts those that reject; says so where all or none were computed",
        _rejecting,
    ),
    Sentence("pretest", "a test is shown beside estimators", "always", "", _pretest),
    Sentence(
        "contextual", "unit means are in a model", "unit means or a projection were fitted", "", _contextual
    ),
    Sentence("causal", "a coefficient is printed", "the primary route has coefficients", "", _causal),
    Sentence("icc", "an intraclass correlation is printed", "the primary route has a finite ratio", "", _icc),
    Sentence(
        "kurtosis", "an interval of a variance is printed", "component intervals were computed", "", _kurtosis
    ),
    Sentence("units", "a reference distribution is used", "always", f"few below {FEW_UNITS} units", _units),
    Sentence(
        "dropped",
        "rows were used",
        "always",
        "lists causes where rows were dropped, and counts one-row units where there are some",
        _dropped,
    ),
    Sentence("size", "units are weighted", "units differ in size", "", _size),
    Sentence(
        "zero",
        "the unit variance is estimated as zero",
        "the ratio of the primary route is zero",
        "names the negative value where a moment estimator was truncated",
        _zero,
    ),
    Sentence(
        "negative",
        "the unit variance is a variance",
        "always",
        "counts routes whose unit variance came out below zero",
        _negative,
    ),
    Sentence("scope", "the model fits the question", "always", "", _scope),
    Sentence("matched", "a printed figure is reproduced", "always", "", _matched),
    Sentence("verified", "the record can be verified", "always", "", _verified),
    Sentence("disclosure", "influence of units is printed", "units were deleted in turn", "", _disclosure),
    Sentence("health", "somebody decides by this", "always", "", _health),
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
