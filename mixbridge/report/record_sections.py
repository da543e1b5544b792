"""The parts of a record beyond the ledger: inference, tests, correlated effects, attribution, audit, deletions.

Each part is a mapping with a ``status``: ``computed``, or why it is not there. Tables are lists of rows. What needs the
rows or the means of units stands apart, under a status of its own, since a record holds neither.
"""

from __future__ import annotations

import platform
from collections.abc import Callable
from dataclasses import replace
from importlib.metadata import PackageNotFoundError, version
from typing import Any

import numpy as np

from mixbridge.audit import audit
from mixbridge.errors import MixbridgeError
from mixbridge.inference.references import default_rule, pick_reference
from mixbridge.panel.absent import Apart, RowlessPanel
from mixbridge.reconcile.path_ranges import coefficient_ranges
from mixbridge.report.plain import plain, plain_table
from mixbridge.routes import REFERENCE_ROUTES, Fit

__all__ = [
    "COMPUTED",
    "added_columns",
    "inference_rows",
    "rows_at_hand",
    "sections_of",
    "software",
    "summary_of",
]

COMPUTED = "computed"
PACKAGES = ("mixbridge", "numpy", "scipy", "pandas", "patsy", "statsmodels")
WIDEST = 6
"""Terms whose widest gap is attributed, at most."""
MOST_PATHS = 40
"""Terms that are followed over the variance ratio, at most."""
AUDIT_SEED = 20_080
"""Of the reference laws that the audit draws."""

Part = dict[str, Any]


def software() -> dict[str, str]:
    """Return the versions of Python, of this package and of those that compute for it."""
    found = {"python": platform.python_version()}
    for name in PACKAGES:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            found[name] = "not installed"
    return found


def rows_at_hand(study: Any) -> str:
    """Return ``held``, ``in chunks`` (read, never held together) or ``absent`` (only moments are at hand)."""
    if isinstance(study.panel, RowlessPanel):
        return "absent"
    return "in chunks" if isinstance(study.panel, Apart) else "held"


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
        "projection": _projection,
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
    found["routes_below_zero"] = int((study.components["unit_variance"] < 0.0).sum())
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
    fit = study.fits[study.primary]
    if not fit.estimated:
        return {"status": f"not computed: {fit.status}"}
    found = study.robust(fit, "CR1")
    return {
        "route": study.primary,
        "covariance": found.kind,
        "notes": [*found.notes, *([] if found.status == "computed" else [found.status])],
        "rows": inference_rows(study, replace(fit, robust=found.covariance_array)),
    }


def _likelihoods(study: Any) -> Part:
    return {"rows": plain_table(study.criteria())}


def _variance_tests(study: Any) -> Part:
    return {"seed": 20_040, "draws": 100_000, "rows": plain_table(study.variance_tests())}


def _route_on_curve(study: Any) -> str:
    """Return the primary route; `reml` where that has no finite ratio."""
    fit = study.fits[study.primary]
    return str(study.primary) if fit.estimated and np.isfinite(fit.ratio) else "reml"


def _contrasts(study: Any) -> Part:
    route = _route_on_curve(study)
    table = study.contrasts(route)
    return {"route": route, "rows": plain_table(table[~table["variance"].str.startswith("cluster-robust")])}


def _contrasts_robust(study: Any) -> Part:
    if not study.has_unit_records:
        return {"status": "not computed: needs rows or the products of units, which are not at hand"}
    route = _route_on_curve(study)
    table = study.contrasts(route)
    return {"route": route, "rows": plain_table(table[table["variance"].str.startswith("cluster-robust")])}


def added_columns(study: Any) -> dict[str, Any] | None:
    """Return form and statement of the columns added for correlated effects; None where there are none.

    ``means_of`` names the columns whose means were chosen; null where all of them, or other columns, were added.
    """
    if study.unit_means is not None:
        wide = study.unit_means.augmented
        chosen = [name for name in wide.varying if name not in wide.left_out] if wide.partial else None
        return {"form": "mundlak", "means_of": chosen, "statement": wide.statement}
    if study.projection is not None:
        return {"form": study.projection.form, "means_of": None, "statement": study.projection.statement}
    return None


def _unit_means(study: Any) -> Part:
    """Within, between and contextual coefficients, and the test of the means."""
    if study.projection is not None:
        return {"status": "not computed: this study projects unit effects on other columns"}
    wide = study if study.unit_means is not None else study.correlated("mundlak")
    route = _route_on_curve(wide)
    fit = wide.fit(route)
    certificate = wide.slope_certificate()
    return {
        "route": route,
        "statement": wide.unit_means.augmented.statement,
        "coordinates": plain_table(wide.coordinates(route).table),
        "tests": plain_table(wide.mean_tests(route)),
        "certificate": {
            "holds": bool(certificate.holds),
            "largest": plain(certificate.largest),
            "statements": certificate.lines(),
        },
        "coefficients": inference_rows(wide, fit) if fit.estimated else [],
    }


def _projection(study: Any) -> Part:
    """Test the restrictions inside a projection of unit effects."""
    if study.projection is None:
        return {"status": "no projection in this study"}
    route = _route_on_curve(study)
    return {"route": route, "tests": plain_table(study.projection_tests(route))}


def _attributions(study: Any) -> Part:
    """Attribute the widest gap of each term that is not immaterial, the widest first."""
    ledger = study.ledger
    loud = ledger[
        ledger["verdict"].isin(["visible", "conflicting"]) & ~ledger["route"].isin(REFERENCE_ROUTES)
    ]
    apart = int(loud["term"].nunique())
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
    return {"terms_apart": apart, "rows": rows}


def _paths(study: Any) -> Part:
    """Follow every coefficient over the variance ratio."""
    names = study.curve.names
    rows = [
        {
            "term": found.term,
            "lowest": plain(found.range_all[0]),
            "highest": plain(found.range_all[1]),
            "lowest_allowed": plain(found.range_allowed[0]),
            "highest_allowed": plain(found.range_allowed[1]),
            "changes_of_sign": [[plain(value) for value in change] for change in found.changes],
        }
        for found in coefficient_ranges(study.curve, names[:MOST_PATHS], confidence=study.confidence)
    ]
    return {"terms": len(names), "rows": rows}


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
    if not study.fits[study.primary].estimated:
        return {"status": f"not computed: {study.fits[study.primary].status}"}
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
    found = audit(study, seed=AUDIT_SEED, show_units=False)  # a record names no unit
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
    p = np.array([item.p_value for item in found])
    return {
        "seed": AUDIT_SEED,
        "level": found.level,
        "power": found.power,
        "tests": int(np.isfinite(p).sum()),
        "tests_rejecting": int((p <= found.level).sum()),
        "header": list(found.header[:3]),
        "rows": rows,
    }
