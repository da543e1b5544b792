"""`audit`: run the checks on one study and put what they find into one table."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import NO_PERIOD, Audit, Finding, StudyView
from mixbridge.audit.registry import CHECKS, Check
from mixbridge.errors import DataError, IdentificationError, OptionError
from mixbridge.panel.absent import Apart

__all__ = ["audit"]

TOGETHER = (
    "All routes share one covariance model, a unit effect and independent errors of equal variance, so "
    "they agree together when "
    "it is wrong: their agreement is no evidence for it."
)
CHOOSING = (
    "No row chooses an estimator. Testing first and then choosing distorts size and coverage: after a "
    "contrast test that does "
    "not reject, a nominal 5% test from generalised least squares can reject a true hypothesis far more often, "
    "in the worst case nearly always (Guggenberger 2010; from memory)."
)
NOT_EVIDENCE = "Not rejecting is not evidence for an assumption: each row says what it could have seen."


def audit(
    study: StudyView,
    *,
    checks: Sequence[str] | None = None,
    level: float = 0.05,
    power: float = 0.8,
    seed: int = 20_080,
    show_units: bool = True,
) -> Audit:
    """Look at every assumption that the routes share.

    Parameters
    ----------
    study : StudyView
        A study, or what has its panel, moments, curve, products and fits.
    checks : sequence of str, optional
        Keys of the checks wanted; all of `mixbridge.audit.CHECKS` unless given.
    level : float
        Level of the tests.
    power : float
        Power at which detectable departures are stated.
    seed : int
        Of the reference laws that are drawn.
    show_units : bool
        Whether outlying units and rows are named; who stands out may disclose a confidential unit.

    Returns
    -------
    Audit

    Examples
    --------
    >>> import mixbridge
    >>> from mixbridge.audit import audit
    >>> data = mixbridge.demo.apiaries()
    >>> study = mixbridge.crosscheck("honey ~ forage + feeding", data, unit="apiary", period="season")
    >>> found = audit(study, checks=["unit_means_model"])
    >>> found["unit_means_model"].p_value < 0.001
    True
    """
    for name, value in (("level", level), ("power", power)):
        if not (isinstance(value, float) and 0.0 < value < 1.0):
            raise OptionError(f"{name}={value!r} is not allowed; allowed: a number between 0 and 1.")
    if not level < power:
        raise OptionError(f"power={power!r} must be above level={level!r}.")
    known = [check.key for check in CHECKS]
    for key in checks or ():
        if key not in known:
            raise OptionError.not_among("checks", key, known)
    bench = Bench(study, level, power, seed, show_units)
    found: list[Finding] = []
    for check in CHECKS:
        if checks is None or check.key in checks:
            found += [replace(item, assumption=check.assumption) for item in _run(check, bench)]
    return Audit(_header(found, level), tuple(found), level, power)


def _run(check: Check, bench: Bench) -> Sequence[Finding]:
    panel = bench.study.panel
    if check.periods and panel.period_ordinals is None:
        if panel.period_name is not None and isinstance(panel, Apart):
            return [
                _without(check, f"not assessable: {panel.why_apart}", "the rows in order are not at hand")
            ]
        reason = "" if panel.period_name is None else f" in order ({panel.period_note})"
        return [_without(check, f"{NO_PERIOD}{reason}", "name the column of periods")]
    try:
        return check.run(bench)
    except (DataError, IdentificationError) as error:  # a DataError: rows or units are not at hand
        return [_without(check, f"not assessable: {error}", "the data at hand do not allow this row")]


def _without(check: Check, status: str, why: str) -> Finding:
    summary = (check.run.__doc__ or "").strip().splitlines()[0]
    return Finding(
        key=check.key.rstrip(":"),
        evidence=summary[0].lower() + summary[1:].rstrip("."),
        departure="not known",
        conclusion=f"Nothing, neither for nor against: {why}.",
        status=status,
    )


def _header(found: Sequence[Finding], level: float) -> tuple[str, ...]:
    p = np.array([item.p_value for item in found])
    tests = int(np.isfinite(p).sum())
    counted = (
        f"{tests} tests stand below, {int((p[np.isfinite(p)] <= level).sum())} reject at {level:g}; if "
        "every assumption held, about "
        f"{tests * level:.1f} would, and they are not independent of one another."
    )
    return (TOGETHER, NOT_EVIDENCE, CHOOSING, *([counted] if tests else []))
