"""Inference after the moments: small-sample references, robust covariances, the restricted likelihood ratio's null."""

from __future__ import annotations

import numpy as np

from benchmarks.arrays import CURVE_ROUTES, NO_ORDER
from benchmarks.measure import COLUMNS, described, interleaved
from benchmarks.panels import panel
from benchmarks.profiles import Profile
from benchmarks.results import Agreement, Ratio, Result, Table
from mixbridge.inference.kenward_roger import kenward_roger
from mixbridge.inference.likelihood_ratio import null_laws
from mixbridge.inference.robust import robust_covariance
from mixbridge.inference.satterthwaite import satterthwaite
from mixbridge.inference.spectrum import spectrum_of
from mixbridge.moments import Moments
from mixbridge.moments.products import UnitProducts
from mixbridge.ratio import curve_of
from mixbridge.routes import fit_route

BLOCK_ROUTES = tuple(key for key in CURVE_ROUTES if key not in ("within", "between"))
DRAWS = 100_000


def inference(profile: Profile) -> Result:
    """Time references for every term, covariances by unit, and a simulated null law."""
    rows = panel(profile.units)
    moments = Moments.from_arrays(rows.x, rows.y, rows.codes, rows.names)
    curve = curve_of(moments)
    fits = {key: fit_route(curve, key, {}, NO_ORDER) for key in BLOCK_ROUTES}
    products = UnitProducts.from_arrays(rows.x, rows.y, rows.codes, rows.names)
    reml, every = fits["reml"], np.eye(curve.rank)
    draws = DRAWS if profile.units >= 10_000 else 2_000

    def references() -> None:
        for fit in fits.values():
            satterthwaite(curve, fit, every)
        kenward_roger(curve, reml).degrees(every)

    tasks = {
        "least squares of the same matrix (numpy.linalg.lstsq)": lambda: np.linalg.lstsq(
            rows.x, rows.y, rcond=None
        ),
        "Satterthwaite for all terms of all curve routes, and Kenward-Roger": references,
        "products of every unit, one pass": lambda: UnitProducts.from_arrays(
            rows.x, rows.y, rows.codes, rows.names
        ),
        "CR0 and CR1": lambda: [
            robust_covariance(curve, products, reml, kind=kind) for kind in ("CR0", "CR1")
        ],
        "CR2 with its degrees of freedom": lambda: robust_covariance(curve, products, reml, kind="CR2"),
        "CR3": lambda: robust_covariance(curve, products, reml, kind="CR3"),
        f"null laws of both likelihood ratios, {draws:,} draws": lambda: null_laws(
            spectrum_of(curve), draws, 1
        ),
    }
    rounds = max(profile.rounds, 3)
    times = interleaved(tasks, rounds)
    names = list(tasks)
    base = times[names[0]].best
    plain = robust_covariance(curve, products, 0.0, kind="CR0").covariance_array
    beta = curve.at(0.0).beta
    scores = np.zeros((curve.units, curve.rank))
    np.add.at(scores, rows.codes, rows.x * (rows.y - rows.x @ beta)[:, None])
    bread = np.linalg.inv(rows.x.T @ rows.x)
    slow = bread @ scores.T @ scores @ bread
    return Result(
        problem=f"{curve.n:,} rows × {curve.rank} columns, {curve.units:,} units of 1 to 19 rows",
        method=described(rounds),
        table=Table(
            ("task", *COLUMNS, "ratio"),
            tuple((name, *timing.cells(), f"{timing.best / base:.3f}") for name, timing in times.items()),
        ),
        ratios=(
            Ratio("references of all terms after the moments", times[names[1]].best, 0.2, unit="s"),
            Ratio("CR0 and CR1, products at hand / lstsq", times[names[3]].best / base, 1.5),
            Ratio(
                "CR0 and CR1, the pass for the products included / lstsq",
                (times[names[2]].best + times[names[3]].best) / base,
            ),
            Ratio("CR2 / lstsq", times[names[4]].best / base, 15.0),
            Ratio("CR3 / lstsq", times[names[5]].best / base, 15.0),
            Ratio("null laws", times[names[6]].best, 3.0, unit="s"),
        ),
        agreements=(
            Agreement(
                "CR0 of pooled least squares against a loop over rows",
                float(np.abs(plain / slow - 1.0).max()),
                1e-9,
                "sums of a million products in another order",
            ),
        ),
        notes=(
            "The products of every unit serve all robust covariances, deletions and unit-level resampling.",
        ),
    )
