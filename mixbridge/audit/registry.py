"""Every check of the audit, in the order of the table."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

from mixbridge.audit import (
    collinearity,
    dependence,
    exogeneity,
    normality,
    outliers,
    serial,
    serial_scores,
    standard_errors,
    unit_effects,
    unit_size,
    unit_variances,
    unit_weights,
    unseen,
    variance_covariates,
)
from mixbridge.audit.bench import Bench
from mixbridge.audit.record import Finding

__all__ = ["CHECKS", "Check"]


@dataclass(frozen=True, slots=True)
class Check:
    """One check.

    Attributes
    ----------
    key : str
        Name; its rows have this key, or start with it and a colon.
    assumption : str
        What is assumed.
    run : callable
        Takes the bench, returns the rows.
    periods : bool
        Whether the order of periods is needed.
    """

    key: str
    assumption: str
    run: Callable[[Bench], Sequence[Finding]]
    periods: bool = False


UNRELATED = "unit effects unrelated to the covariates"
STRICT = "covariates strictly exogenous given the unit effect"
SERIAL = "no serial correlation left in the idiosyncratic error"
EQUAL = "idiosyncratic errors of equal variance"
ACROSS = "units independent of one another"
SIZE = "unit size unrelated to unit effects, errors and covariates"
SEPARATE = "covariates separable"
NORMAL = "unit effects and errors normal"

CHECKS: tuple[Check, ...] = (
    Check("unit_means_model", UNRELATED, unit_effects.joint_model),
    Check("unit_means_robust", UNRELATED, unit_effects.joint_robust),
    Check("unit_means_model:", UNRELATED, unit_effects.terms_model),
    Check("unit_means_robust:", UNRELATED, unit_effects.terms_robust),
    Check("leads", STRICT, exogeneity.leads, periods=True),
    Check("feedback", STRICT, exogeneity.feedback, periods=True),
    Check("same_period", STRICT, unseen.same_period),
    Check("serial_differences", SERIAL, serial.first_differences, periods=True),
    Check("serial_durbin_watson", SERIAL, serial.durbin_watson, periods=True),
    Check("serial_unequal_spacing", SERIAL, serial.unequal_spacing, periods=True),
    Check("serial_joint", SERIAL, serial_scores.joint_score, periods=True),
    Check("serial_one_sided", SERIAL, serial_scores.one_sided_score, periods=True),
    Check(
        "error_ratios",
        "errors independent and of equal variance, as model-based errors need",
        standard_errors.error_ratios,
    ),
    Check("variance_wald", EQUAL, unit_variances.variance_wald),
    Check("variance_levene", EQUAL, unit_variances.levene),
    Check("variance_covariates", EQUAL, variance_covariates.along_columns),
    Check("unit_variance_covariates", "unit effects of equal variance", variance_covariates.along_unit_means),
    Check("cross_section", ACROSS, dependence.cross_section, periods=True),
    Check("unit_size", SIZE, unit_size.size_linear),
    Check("unit_size_log", SIZE, unit_size.log_size),
    Check("unit_complete", SIZE, unit_size.complete_units),
    Check("next_presence", SIZE, unit_size.next_presence, periods=True),
    Check("size_covariates", SIZE, unit_size.size_and_covariates),
    Check("implied_weights", SIZE, unit_weights.implied_weights),
    Check("equal_weights", SIZE, unit_weights.equal_weights),
    Check("collinearity_within", SEPARATE, collinearity.within_units),
    Check("collinearity_between", SEPARATE, collinearity.between_units),
    Check("collinearity_primary", SEPARATE, collinearity.at_primary),
    Check("normal_errors", NORMAL, normality.normal_errors),
    Check("normal_effects", NORMAL, normality.normal_effects),
    Check("outlying_rows", NORMAL, outliers.outlying_rows),
    Check("outlying_units", NORMAL, outliers.outlying_units),
    Check("one_sample", "one sample of independent units", unseen.sample_of_units),
)
"""All checks; a new one is one function and one line here."""
