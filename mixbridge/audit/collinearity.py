"""Collinearity: condition indices with shares of variance, within units, between unit means and at the primary ratio.

Columns are scaled to length one (Belsley, Kuh & Welsch 1980): with singular values d_k and right vectors v_k, index
``d_1/d_k`` and share of ``v_jk^2/d_k^2`` in the variance of coefficient j. Columns are measured from their grand mean
where there is a constant, so that offsets of a covariate do not count as collinearity (the book keeps them). A near
dependency is a large index with two or more shares above one half.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import NO_TEST, Finding

__all__ = ["Indices", "at_primary", "between_units", "condition_indices", "within_units"]

FloatArray = NDArray[np.float64]
LARGE = 30.0
"""Index from which a dependency is called near: the book's rule of thumb."""
SOME = 10.0


@dataclass(frozen=True, slots=True, eq=False)
class Indices:
    """Condition indices, largest last, and shares of variance by index (rows) and column."""

    names: tuple[str, ...]
    values: FloatArray
    shares: FloatArray
    inflation: FloatArray


def condition_indices(factor: FloatArray, names: tuple[str, ...]) -> Indices:
    """Decompose a factor F of the products ``F'F`` of some columns.

    Parameters
    ----------
    factor : ndarray of shape (r, c)
    names : tuple of str

    Returns
    -------
    Indices
    """
    scaled = factor / np.sqrt((factor**2).sum(axis=0))
    _, d, v = np.linalg.svd(scaled, full_matrices=False)
    parts = (v / d[:, None]) ** 2
    inflation = parts.sum(axis=0)
    return Indices(names, d[0] / d, parts / inflation, inflation)


def within_units(bench: Bench) -> Sequence[Finding]:
    """Look at the variation that the within slopes use."""
    moments, curve = bench.curve.moments, bench.curve
    places = [j for j in curve.within_span.kept if j != bench.constant]
    at = [moments.columns.index(curve.names[j]) for j in places]
    factor = moments.within[:, at]
    lost = [
        f"{name} ({reason})"
        for name, reason in curve.reasons["within"].items()
        if curve.names.index(name) != bench.constant
    ]
    return [
        _finding(
            bench, "collinearity_within", "within units", factor, places, lost, "within and first_difference"
        )
    ]


def between_units(bench: Bench) -> Sequence[Finding]:
    """Look at the variation of unit means, by rows."""
    weight = np.sqrt(bench.curve.sizes)
    places = [int(j) for j in bench.curve.between_span.kept if j != bench.constant]
    lost = [f"{name} ({reason})" for name, reason in bench.curve.reasons["between"].items()]
    return [
        _finding(
            bench,
            "collinearity_between",
            "between unit means",
            _means(bench, weight, places),
            places,
            lost,
            "between",
        )
    ]


def at_primary(bench: Bench) -> Sequence[Finding]:
    """Look at the columns as the primary route weights them."""
    psi, moments = bench.primary.ratio, bench.curve.moments
    places = [j for j in range(bench.curve.rank) if j != bench.constant]
    at = [moments.columns.index(bench.names[j]) for j in places]
    weight = np.sqrt(bench.curve.sizes / (1.0 + bench.curve.sizes * psi))
    factor = np.vstack([moments.within[:, at], _means(bench, weight, places)])
    name = f"as weighted by {bench.primary.route}"
    return [
        _finding(
            bench,
            "collinearity_primary",
            name,
            factor,
            places,
            [],
            "routes on the curve near the primary one",
        )
    ]


def _means(bench: Bench, weight: FloatArray, places: list[int]) -> FloatArray:
    """Return a factor of weighted products of unit means; about their weighted mean where there is a constant."""
    moments = bench.curve.moments
    at = [moments.columns.index(bench.names[j]) + 1 for j in places]
    stacked = (weight[:, None, None] * moments.between).reshape(-1, moments.between.shape[2])
    level, columns = stacked[:, [0]], stacked[:, at]
    if bench.constant is None:
        return np.asarray(columns + level * (moments.shift / moments.scale)[np.array(at) - 1])
    return np.asarray(columns - level @ (level.T @ columns) / float((level**2).sum()))


def _finding(
    bench: Bench,
    key: str,
    where: str,
    factor: FloatArray,
    places: list[int],
    lost: list[str],
    routes: str,
) -> Finding:
    evidence = f"condition indices and shares of variance {where}, columns of length one about their means"
    gone = f"not determined there: {'; '.join(lost)}" if lost else ""
    if len(places) < 2:
        note = "fewer than two columns: nothing to be collinear"
        return Finding(key=key, evidence=evidence, departure=gone, conclusion=note, status=NO_TEST)
    names = tuple(bench.names[j] for j in places)
    found = condition_indices(factor, names)
    near = [
        f"{found.values[k]:.3g}: {', '.join(n for n, s in zip(names, found.shares[k], strict=True) if s > 0.5)}"
        for k in range(len(names))
        if found.values[k] >= SOME and (found.shares[k] > 0.5).sum() > 1
    ]
    worst = int(np.argmax(found.inflation))
    largest = float(found.values[-1])
    numbers = {"largest_index": largest}
    numbers |= {
        f"error_inflation:{n}": float(np.sqrt(v)) for n, v in zip(names, found.inflation, strict=True)
    }
    for k, index in enumerate(found.values):
        numbers[f"index:{k}"] = float(index)
        numbers |= {f"share:{k}:{n}": float(s) for n, s in zip(names, found.shares[k], strict=True)}
    degree = "large" if largest >= LARGE else "moderate" if largest >= SOME else "small"
    words = f"largest index {largest:.3g} ({degree})"
    if near:
        words += f"; near dependencies (index: columns) {'; '.join(near)}"
    return Finding(
        key=key,
        evidence=evidence,
        statistic=largest,
        departure="; ".join(part for part in (words, gone) if part),
        consequence=f"standard error of {names[worst]} under {routes} "
        f"{np.sqrt(found.inflation[worst]):.3g} times what unrelated "
        "columns would give; the gap between routes for such columns is noisier too",
        conclusion="Collinearity is no broken assumption and biases nothing: the data separate these "
        "columns badly. Dropping one "
        "changes the question.",
        status=NO_TEST,
        numbers=numbers,
    )
