"""A slow, obvious, dense second derivation of every quadratic route, for panels of up to about 120 rows."""

from .differences import DifferenceFit, oracle_first_difference
from .fit import GLS_ROUTES, ROUTES, OracleFit, oracle_fit
from .information import information_covariance, reml_first_order

__all__ = [
    "GLS_ROUTES",
    "ROUTES",
    "DifferenceFit",
    "OracleFit",
    "information_covariance",
    "oracle_first_difference",
    "oracle_fit",
    "reml_first_order",
]
