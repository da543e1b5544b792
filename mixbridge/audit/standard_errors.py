"""What dependence within units and unequal variances do to every standard error: robust over model-based.

The robust one is cluster-robust by unit with multiplier N/(N - 1) (Liang & Zeger 1986; Arellano 1987). It allows for
serial correlation and unequal variances together and does not tell them apart.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import NO_TEST, Finding
from mixbridge.errors import MixbridgeError

__all__ = ["error_ratios"]


def error_ratios(bench: Bench) -> Sequence[Finding]:
    """Divide cluster-robust by model-based standard errors, every route and term."""
    _ = bench.study.products  # where neither rows nor units are at hand this says so
    numbers: dict[str, float] = {}
    lost = []
    for key, fit in bench.study.fits.items():
        if key == "first_difference" or not fit.estimated or not fit.scale > 0.0:
            continue
        try:
            robust = bench.study.fit(key, covariance="CR1").standard_errors.to_numpy()
        except MixbridgeError:
            lost.append(key)
            continue
        plain = fit.standard_errors.to_numpy()
        for j, term in enumerate(fit.terms):
            if robust[j] > 0.0 and plain[j] > 0.0:
                numbers[f"{key}:{term}"] = float(robust[j] / plain[j])
    if not numbers:
        return [
            Finding(
                "error_ratios",
                "cluster-robust over model-based standard errors",
                status="not computed: no route has both",
            )
        ]
    primary = bench.primary.route
    shown = {key: value for key, value in numbers.items() if key.startswith(f"{primary}:")} or numbers
    low, high = min(shown, key=shown.__getitem__), max(shown, key=shown.__getitem__)
    by_route: dict[str, list[float]] = {}
    for key, value in numbers.items():
        route = key.split(":", 1)[0]
        by_route.setdefault(route, []).append(value)
    routes = "; ".join(f"{route} {min(v):.2f} to {max(v):.2f}" for route, v in by_route.items())
    units = bench.curve.units
    return [
        Finding(
            key="error_ratios",
            evidence="cluster-robust (CR1, by unit) over model-based standard errors, every route shown"
            + (f"; not computed for {', '.join(lost)}" if lost else ""),
            departure=f"{low.split(':', 1)[1]} {shown[low]:.2f} to {high.split(':', 1)[1]} "
            f"{shown[high]:.2f} ({low.split(':', 1)[0]}). "
            f"By route: {routes}",
            consequence="a ratio of 1.2 means that the model-based interval is too short by that factor; "
            "coefficients do not change",
            conclusion=f"With {units} units the ratio itself has a standard error of about "
            f"{np.sqrt(0.5 / max(units - 1, 1)):.2f} "
            "or more where few units carry a coefficient, and robust errors tend to be too small with few units. "
            "Serial correlation and unequal variances are both in it.",
            status=NO_TEST,
            numbers=numbers,
        )
    ]
