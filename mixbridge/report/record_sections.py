"""The parts of a record beyond the ledger: inference, tests, correlated effects, attribution, audit, deletions.

Each part is a mapping with a ``status``: ``computed``, or why it is not there. Tables are lists of rows. What needs the
rows or the means of units stands apart, under a status of its own, since a record holds neither.
"""

from __future__ import annotations

from collections.abc import Callable
from importlib.metadata import PackageNotFoundError, version
from typing import Any

import numpy as np

from mixbridge.audit import audit
from mixbridge.errors import MixbridgeError
from mixbridge.inference.references import default_rule, pick_reference
from mixbridge.report.plain import plain, plain_table
from mixbridge.routes import REFERENCE_ROUTES, Fit

__all__ = ["COMPUTED", "added_columns", "inference_rows", "sections_of", "software", "summary_of"]

COMPUTED = "computed"
PACKAGES = ("mixbridge", "numpy", "scipy", "pandas", "patsy", "statsmodels")
WIDEST = 6
"""Terms whose widest gap is attributed, at most."""

Part = dict[str, Any]


def software() -> dict[str, str]:
    """Return the versions of this package and of those that compute for it."""
    found = {}
    for name in PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found


def sections_of(study: Any) -> dict[str, Part]:
    """Return every part.

    Parameters
    ----------
    study : Study

    Returns
    -------
    dict of str to dict
    """
    makers: dict[str, Callable[[Any], Part]] = {
        "inference": _inference,
        "robust": _robust,
        "likelihoods": _likelihoods,
        "variance_tests": _variance_tests,
        "component_intervals": lambda s: {"rows": plain_table(s.component_intervals())},
        "contrasts": _contrasts,
        "contrasts_robust": _contrasts_robust,
        "unit_means": _unit_means,
        "attributions": _attributions,
        "paths": _paths,
        "without_singletons": _without_singletons,
        "influence": _influence,
        "audit": _audit,
    }
    return {name: _guarded(make, study) for name, make in makers.items()}


def summary_of(study: Any) -> dict[str, Any]:
    """Count classes of agreement by term and over all, and verdicts of the identities."""
    ledger = study.ledger
    votes = ledger[~ledger["route"].isin(REFERENCE_ROUTES) & (ledger["route"] != study.primary)]
    verdicts = [item.verdict for item in study.identity_results]
    counts = {
        str(term): {
            str(name): int(number) for name, number in part["verdict"].value_counts(sort=False).items()
        }
        for term, part in votes.groupby("term", sort=False)
    }
    found: dict[str, Any] = {"other_routes": int(votes["route"].nunique()), "terms": counts}
    for name in ("identical", "immaterial", "visible", "conflicting"):
        found[f"other_routes_{name}"] = int((votes["verdict"] == name).sum())
    found["identities_hold"] = verdicts.count("holds")
    found["identities_fail"] = verdicts.count("FAILS")
    found["identities_do_not_apply"] = len(verdicts) - found["identities_hold"] - found["identities_fail"]
    return found


def _guarded(make: Callable[[Any], Part], study: Any) -> Part:
    try:
        return {"status": COMPUTED, **make(study)}
    except MixbridgeError as reason:
        return {"status": f"not computed: {reason}"}


def inference_rows(study: Any, fit: Fit) -> list[dict[str, Any]]:
    """Return estimate, standard error, reference, interval and p value of every term under the ledger's rule."""
    rule = default_rule(fit) if fit.robust is None else "t_units"
    rows = []
    references = pick_reference(study.curve, fit, rule=rule)
    for term, estimate, error, reference in zip(
        fit.terms, fit.beta, fit.standard_errors.to_numpy(), references, strict=True
    ):
        low, high = reference.interval(float(estimate), float(error), study.confidence)
        rows.append(
            {
                "term": term,
                "estimate": plain(estimate),
                "standard_error": plain(error),
                "reference": reference.text,
                "df": plain(reference.df),
                "lower": plain(low),
                "upper": plain(high),
                "p_value": plain(reference.p_value(float(estimate / error)) if error > 0.0 else np.nan),
            }
        )
    return rows


def _inference(study: Any) -> Part:
    fit = study.fits[study.primary]
    if not fit.estimated:
        return {"status": f"not computed: {fit.status}"}
    return {"route": study.primary, "covariance": "model", "rows": inference_rows(study, fit)}


def _robust(study: Any) -> Part:
    if study.primary == "first_difference" or not study.has_unit_records:
        return {"status": "not computed: needs rows or the products of units, which are not at hand"}
    fit = study.fit(study.primary, covariance="CR1")
    if not fit.estimated:
        return {"status": f"not computed: {fit.status}"}
    return {"route": study.primary, "covariance": "CR1", "rows": inference_rows(study, fit)}


def _likelihoods(study: Any) -> Part:
    return {"rows": plain_table(study.criteria())}


def _variance_tests(study: Any) -> Part:
    return {"seed": 20_040, "draws": 100_000, "rows": plain_table(study.variance_tests())}


def _contrasts(study: Any) -> Part:
    table = study.contrasts()
    return {"rows": plain_table(table[~table["variance"].str.startswith("cluster-robust")])}


def _contrasts_robust(study: Any) -> Part:
    if not study.has_unit_records:
        return {"status": "not computed: needs rows or the products of units, which are not at hand"}
    table = study.contrasts()
    return {"rows": plain_table(table[table["variance"].str.startswith("cluster-robust")])}


def added_columns(study: Any) -> dict[str, str] | None:
    """Return form and statement of the columns added for correlated effects; None where there are none."""
    if study.unit_means is not None:
        return {"form": "mundlak", "statement": study.unit_means.augmented.statement}
    if study.projection is not None:
        return {"form": study.projection.form, "statement": study.projection.statement}
    return None


def _unit_means(study: Any) -> Part:
    """Within, between and contextual coefficients, and the test of the means."""
    if added_columns(study) is not None:
        return {"status": "not computed: this study has added columns already"}
    wide = study.correlated("mundlak")
    fit = wide.fit(wide.primary)
    certificate = wide.slope_certificate()
    return {
        "route": wide.primary,
        "statement": wide.unit_means.augmented.statement,
        "coordinates": plain_table(wide.coordinates().table),
        "tests": plain_table(wide.mean_tests()),
        "certificate": {
            "holds": bool(certificate.holds),
            "largest": plain(certificate.largest),
            "statements": certificate.lines(),
        },
        "coefficients": inference_rows(wide, fit) if fit.estimated else [],
    }


def _attributions(study: Any) -> Part:
    """Attribute the widest gap of each term that is not immaterial, the widest first."""
    ledger = study.ledger
    loud = ledger[
        ledger["verdict"].isin(["visible", "conflicting"]) & ~ledger["route"].isin(REFERENCE_ROUTES)
    ]
    loud = loud.assign(size=loud["gap_in_se"].abs()).sort_values("size", ascending=False, kind="stable")
    rows = []
    for term, route in loud.drop_duplicates("term")[["term", "route"]].head(WIDEST).itertuples(index=False):
        try:
            found = study.attribution(term, route)
        except MixbridgeError as reason:
            rows.append({"term": term, "route": route, "status": f"not computed: {reason}"})
            continue
        rows.append(
            {
                "term": term,
                "route": route,
                "status": COMPUTED,
                "gap": plain(found.gap.estimate_a - found.gap.estimate_b),
                "gap_in_se": plain((found.gap.estimate_a - found.gap.estimate_b) / found.gap.standard_error),
                "causes": plain_table(found.causes),
                "half_width": plain_table(found.half_width),
                "sentences": list(found.sentences),
            }
        )
    return {"rows": rows}


def _paths(study: Any) -> Part:
    rows = []
    for term in study.curve.names[:40]:
        found = study.path(term, points=33)
        rows.append(
            {
                "term": term,
                "lowest": plain(found.range_all[0]),
                "highest": plain(found.range_all[1]),
                "lowest_allowed": plain(found.range_allowed[0]),
                "highest_allowed": plain(found.range_allowed[1]),
                "changes_of_sign": [[plain(value) for value in change] for change in found.changes],
            }
        )
    return {"rows": rows}


def _without_singletons(study: Any) -> Part:
    if not study.singletons:
        return {"status": "no unit has one row"}
    route = study.primary
    if route == "first_difference":
        return {"status": "not computed: one-row units have no differences"}
    fit = study.fit(route, one_row_units="dropped")
    full = study.fits[route]
    error = full.standard_errors.to_numpy()
    moved = (fit.beta - full.beta) / np.where(error > 0.0, error, np.nan)
    rows = [
        {"term": term, "estimate": plain(beta), "moved_in_se": plain(change)}
        for term, beta, change in zip(fit.terms, fit.beta, moved, strict=True)
    ]
    return {
        "route": route,
        "units": study.singletons,
        "fit_status": fit.status,
        "ratio": plain(fit.ratio),
        "rows": rows,
    }


def _influence(study: Any) -> Part:
    """Delete each unit: how far the primary route moves at most, and how many units decide a conclusion."""
    if not study.has_unit_records:
        return {"status": "not computed: needs rows or the means of units, which are not at hand"}
    found = study.leave_one_out(routes=[study.primary])
    moved = found.influence()
    deciding = found.deciding()
    rows = [
        {
            "term": str(term),
            "largest_in_se": plain(moved[term].abs().max()),
            "sign_changes": int(
                deciding.loc[
                    (deciding["term"] == term) & (deciding["conclusion"] == "interval against zero"), "unit"
                ].nunique()
            ),
        }
        for term in moved.columns
    ]
    return {"route": study.primary, "units": len(moved), "rows": rows, "notes": list(found.notes)}


def _audit(study: Any) -> Part:
    found = audit(study, show_units=False)  # a record names no unit
    rows = {
        item.key: {
            "assumption": item.assumption,
            "evidence": item.evidence,
            "statistic": plain(item.statistic),
            "reference": item.reference,
            "p_value": plain(item.p_value),
            "departure": item.departure,
            "consequence": item.consequence,
            "conclusion": item.conclusion,
            "status_of_row": item.status,
        }
        for item in found.findings
    }
    return {"level": found.level, "power": found.power, "header": list(found.header[:3]), "rows": rows}
