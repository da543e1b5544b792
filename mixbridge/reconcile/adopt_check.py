"""Checks of an adopted fit against the certified optimum and the curve: is it the optimum, is it on the curve."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from mixbridge.ratio import Curve, Point
from mixbridge.reconcile.adopt_read import Readout
from mixbridge.routes import Fit, Profile, log_likelihood
from mixbridge.routes.likelihood import Kind

__all__ = ["Check", "Placed", "check_curve", "check_optimum", "placed_fit"]

FloatArray = NDArray[np.float64]
HOLDS, DIFFERS, NONE = "holds", "DIFFERS", "does not apply"
CLOSE = 1e-6
"""Relative difference allowed between two computations of one number: the other program solves normal equations of
columns that are not centred, and loses twice the digits of their condition; 1e-6 is still below any printed digit."""


@dataclass(frozen=True, slots=True)
class Check:
    """One statement about an adopted fit.

    Attributes
    ----------
    name, statement : str
    verdict : str
        ``holds``, ``DIFFERS`` or ``does not apply``.
    theirs, ours : float
        The number of the fit, and ours.
    difference, allowed : float
        Distance of the two in the measure that the note names, and the largest that is put down to computing.
    note : str
    """

    name: str
    statement: str
    verdict: str
    theirs: float
    ours: float
    difference: float
    allowed: float
    note: str


@dataclass(frozen=True, slots=True, eq=False)
class Placed:
    """The adopted fit in the order of the study's terms.

    Attributes
    ----------
    readout : Readout
    beta, errors : ndarray of shape (p,)
    point : Point or None
        The curve at its ratio; None where it has no finite one.
    """

    readout: Readout
    beta: FloatArray
    errors: FloatArray
    point: Point | None


def _made(
    name: str, statement: str, numbers: tuple[float, float], *, difference: float, allowed: float, note: str
) -> Check:
    verdict = HOLDS if difference <= allowed else DIFFERS
    theirs, ours = float(numbers[0]), float(numbers[1])
    return Check(name, statement, verdict, theirs, ours, float(difference), float(allowed), note)


def placed_fit(placed: Placed, like: Fit) -> Fit:
    """Return our record of the fit: the curve at its ratio with its variances.

    Parameters
    ----------
    placed : Placed
        With a point on the curve.
    like : Fit
        Of the route whose record is filled.
    """
    point, read = placed.point, placed.readout
    assert point is not None
    return replace(
        like,
        beta=point.beta,
        root=point.root,
        ratio=point.psi,
        scale=read.idiosyncratic_variance,
        unit_variance=read.unit_variance,
        unit_variance_raw=read.unit_variance,
        idiosyncratic_variance=read.idiosyncratic_variance,
        certificate=None,
        robust=None,
    )


def check_curve(curve: Curve, placed: Placed, effects: Mapping[object, tuple[int, float]]) -> list[Check]:
    """Check the coefficients, the scale and the predicted effects against the curve at the ratio of the fit.

    Parameters
    ----------
    curve : Curve
    placed : Placed
    effects : mapping
        Unit -> its number of rows and the mean of its residuals at the coefficients of the fit.
    """
    read, point = placed.readout, placed.point
    if point is None:
        return []
    found = []
    unit = np.sqrt(point.residual / (curve.n - curve.rank) * (point.root**2).sum(axis=1))
    gap = np.abs(placed.beta - point.beta) / unit
    worst = int(np.argmax(gap))
    found.append(
        _made(
            "on the curve",
            "its coefficients are generalised least squares at its variance ratio",
            (placed.beta[worst], point.beta[worst]),
            difference=gap[worst],
            allowed=CLOSE,
            note=f"largest difference, in standard errors: {curve.names[worst]}",
        )
    )
    if read.route in ("ml", "reml"):
        ours = point.residual / (curve.n - (curve.rank if read.route == "reml" else 0))
        found.append(
            _made(
                "scale",
                "its idiosyncratic variance is the residual sum of squares at its ratio over "
                + ("n - K" if read.route == "reml" else "n"),
                (read.idiosyncratic_variance, ours),
                difference=abs(read.idiosyncratic_variance / ours - 1.0),
                allowed=CLOSE,
                note="relative",
            )
        )
    if read.effects is not None:
        size = np.sqrt(read.unit_variance)
        gaps = []
        for key, (rows, mean) in effects.items():
            shrunk = rows * point.psi / (1.0 + rows * point.psi) * mean
            gaps.append((abs(read.effects[key] - shrunk) / size, read.effects[key], shrunk))
        worst_gap = max(gaps)
        found.append(
            _made(
                "predicted effects",
                "its predicted unit effects are mean residuals times T psi / (1 + T psi)",
                (worst_gap[1], worst_gap[2]),
                difference=worst_gap[0],
                allowed=CLOSE,
                note="largest difference, in standard deviations of the unit effect",
            )
        )
    return found


def check_optimum(curve: Curve, placed: Placed, best: Fit, worse: float) -> list[Check]:
    """Check a likelihood fit against the certified optimum.

    Parameters
    ----------
    curve : Curve
    placed : Placed
    best : Fit
        Our fit of the same likelihood.
    worse : float
        Deviance above the optimum that counts as another place.
    """
    read, point = placed.readout, placed.point
    found = []
    if read.converged is not None:
        found.append(
            Check(
                "converged",
                "the program says that its iterations converged",
                HOLDS if read.converged else DIFFERS,
                float(read.converged),
                1.0,
                float(not read.converged),
                0.0,
                "",
            )
        )
    if read.route not in ("ml", "reml"):
        return found
    kind: Kind = "reml" if read.route == "reml" else "ml"
    if best.certificate is None:
        found.append(Check("optimum", "it is the optimum", NONE, np.nan, np.nan, np.nan, np.nan, best.status))
        return found
    if point is None:
        note = "its idiosyncratic variance is not positive, so it has no variance ratio"
        found.append(Check("optimum", "it is the optimum", DIFFERS, np.nan, best.ratio, np.inf, worse, note))
        return found
    at = log_likelihood(curve, kind, point.psi, constant=False)
    top = log_likelihood(curve, kind, best.ratio, constant=False)
    excess = max(2.0 * (top - at), 0.0)
    shown = best.certificate.lines()[0].removeprefix("value: ")
    found.append(
        _made(
            "optimum",
            "no variance ratio has a lower deviance than its own",
            (point.psi, best.ratio),
            difference=excess,
            allowed=worse,
            note=f"deviance above the certified optimum: {shown}{_place(point.psi, best, excess, worse)}",
        )
    )
    found.append(
        _made(
            "log-likelihood",
            "its printed log-likelihood is that of its variance ratio"
            + (", without half log|X'X|" if kind == "reml" else ""),
            (read.log_likelihood, at),
            difference=abs(read.log_likelihood - at) / max(abs(at), 1.0),
            allowed=CLOSE,
            note="relative",
        )
    )
    slope = float(Profile(curve, kind).values(np.array([point.psi])).slope[0])
    step = point.psi * slope if point.psi > 0.0 else max(-slope, 0.0) / float(curve.sizes[-1])
    found.append(
        _made(
            "estimating equation",
            "the derivative of the deviance is zero at its ratio, or not negative at zero",
            (step, 0.0),
            difference=abs(step),
            allowed=worse**0.5,
            note="derivative in log psi; at zero, in T psi",
        )
    )
    return found


def _place(psi: float, best: Fit, excess: float, worse: float) -> str:
    """Say what is where the fit stopped."""
    assert best.certificate is not None
    if excess <= worse:
        return ""
    for other in best.certificate.stationary:
        if other.psi != best.ratio and abs(psi - other.psi) <= 1e-2 * max(other.psi, 1e-12):
            return f"; it stopped at another stationary point, a {other.kind}"
    return "; no stationary point is near it: it stopped on the way"


def nearest_errors(
    errors: FloatArray, offered: list[tuple[str, FloatArray]], tolerance: float = CLOSE
) -> tuple[list[str], str, float]:
    """Find the conventions that give these standard errors.

    Parameters
    ----------
    errors : ndarray of shape (p,)
    offered : list of (str, ndarray)
        Conventions in words with their standard errors.
    tolerance : float
        Largest relative difference that counts as equal.

    Returns
    -------
    equal : list of str
        Conventions that give them in every coefficient.
    nearest : str
        The one with the smallest largest difference.
    distance : float
        That difference, relative; infinite if none can be compared.
    """
    distances = []
    for words, values in offered:
        if (
            values.shape == errors.shape
            and np.isfinite(values).all()
            and np.isfinite(errors).all()
            and (values > 0.0).all()
        ):
            distances.append((float(np.abs(errors / values - 1.0).max()), words))
    if not distances:
        return [], "none", np.inf
    best = min(distances)
    return [words for distance, words in distances if distance <= tolerance], best[1], best[0]
