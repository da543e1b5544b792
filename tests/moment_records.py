"""Small panels with their three kinds of moments, and what it takes for two of them to be the same."""

import numpy as np
import pandas as pd

from mixbridge.moments import collect
from mixbridge.moments.products import collect_products
from mixbridge.ratio import curve_of
from mixbridge.routes import LEDGER_ROUTES, fit_route

CURVE = [key for key in LEDGER_ROUTES if key != "first_difference"]


def rows_of(seed=1, units=40, offset=0.0):
    rng = np.random.default_rng(seed)
    codes = np.repeat(np.arange(units), rng.integers(1, 7, units))
    n = codes.size
    between = rng.normal(size=units)[codes]
    x = np.column_stack([np.ones(n), offset + rng.normal(size=n) + between, rng.normal(size=units)[codes]])
    y = 1 + x[:, 1] - offset + between + rng.normal(size=n)
    return x, y, codes


def records_of(x, y, codes, keys=None):
    names = ("Intercept", "x", "w", "y")
    index = pd.RangeIndex(int(codes.max()) + 1) if keys is None else keys

    def blocks():
        yield codes, x, y

    opened, moments = collect(blocks, names, index)
    return opened, moments, collect_products(blocks, opened, moments, index)


def fits_of(moments):
    curve = curve_of(moments)
    return {key: fit_route(curve, key, {}, "no order") for key in CURVE}


def same_fits(one, two, rtol=1e-8):
    for key in CURVE:
        a, b = one[key], two[key]
        assert a.status == b.status, key
        np.testing.assert_allclose(a.beta, b.beta, rtol=rtol, atol=1e-9, err_msg=key)
        np.testing.assert_allclose(a.standard_errors, b.standard_errors, rtol=10 * rtol, err_msg=key)
