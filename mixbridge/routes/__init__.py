"""Routes: complete ways from data to estimates, with their conventions as data."""

from mixbridge.routes.certificate import Certificate, StationaryPoint
from mixbridge.routes.conventions import AXES, Axis, axes_of, resolve
from mixbridge.routes.fitting import LEDGER_ROUTES, REFERENCE_ROUTES, ROUTES, fit_route, named_route
from mixbridge.routes.iterate import iterate
from mixbridge.routes.least_squares import Differences, differences_of
from mixbridge.routes.likelihood import Profile, log_likelihood
from mixbridge.routes.record import FITTED, NOT_POSITIVE, TRUNCATED, Fit

__all__ = [
    "AXES",
    "FITTED",
    "LEDGER_ROUTES",
    "NOT_POSITIVE",
    "REFERENCE_ROUTES",
    "ROUTES",
    "TRUNCATED",
    "Axis",
    "Certificate",
    "Differences",
    "Fit",
    "Profile",
    "StationaryPoint",
    "axes_of",
    "differences_of",
    "fit_route",
    "iterate",
    "log_likelihood",
    "named_route",
    "resolve",
]
