"""Panels to be cut into parts, and how near the fits of merged parts have to be."""

from __future__ import annotations

import numpy as np
import pandas as pd
from allowance import EPS, conditions

from mixbridge.moments import Moments, collect
from mixbridge.moments.products import collect_products
from mixbridge.ratio import curve_of
from mixbridge.routes import LEDGER_ROUTES, fit_route

CURVE = [key for key in LEDGER_ROUTES if key != "first_difference"]
NAMES = ("c", "x", "w", "v")


def records(X, y, units, names=NAMES):
    """Open moments, closed moments and unit products of some rows; keys are the units."""
    codes, keys = pd.factorize(units)

    def blocks():
        yield from ((codes[s : s + 50], X[s : s + 50], y[s : s + 50]) for s in range(0, len(y), 50))

    opened, moments = collect(blocks, (*names, "y"), pd.Index(keys))
    return opened, moments, collect_products(blocks, opened, moments)


def rows_of(seed, *, offset=0.0, near=1.0, units=30):
    """A column that varies both ways, one between, one that is nearly the first; sizes 1 to 6."""
    rng = np.random.default_rng(seed)
    sizes = rng.integers(1, 7, units)
    sizes[:3] = 4, 5, 6
    codes = np.repeat(np.arange(units), sizes)
    effect = rng.normal(size=units)[codes]
    x = rng.normal(size=codes.size) + effect
    w = rng.normal(size=units)[codes]
    v = x + near * rng.normal(size=codes.size)
    X = np.column_stack([np.ones(codes.size), offset + x, w, v - offset / 2])
    return X, offset + x + effect + rng.normal(size=codes.size), codes


def same_fits(X, y, codes, one: Moments, two: Moments, factor=4.0):
    """Every curve route the same to `factor` times ``n eps kappa``, coefficients in standard errors.

    kappa: condition of the rows times the larger one of within and between. The offset of the data is not in it: it
    cancels before anything is rounded. An intercept at an offset takes the offset times the slopes' bound.
    """
    c = conditions(X, y, codes)
    allowed = factor * EPS * len(y) * c.combined
    first, second = curve_of(one), curve_of(two)
    for key in CURVE:
        a, b = fit_route(first, key, {}, "no order"), fit_route(second, key, {}, "no order")
        assert a.status == b.status, key
        if not a.estimated:
            continue
        errors = np.asarray(a.standard_errors)
        moved = np.abs(a.beta - b.beta) / errors
        if c.intercept is not None:
            at = c.intercept
            level = abs(c.level_y) + (np.abs(c.level * np.nan_to_num(a.beta))).sum()
            reach = np.delete(np.abs(c.level) * errors, at).sum() + EPS / allowed * level
            moved[at] /= 1.0 + np.nan_to_num(reach / errors[at])
        assert np.nanmax(moved) <= allowed, key
        np.testing.assert_allclose(b.standard_errors, a.standard_errors, rtol=allowed, err_msg=key)
        if np.isfinite(a.ratio):
            assert abs(a.ratio - b.ratio) <= allowed * (1.0 + a.ratio), key
