"""mixbridge: one random-intercept model, every route to its estimates, one ledger of where they agree and differ."""

from mixbridge import demo
from mixbridge.errors import (
    DataError,
    DisagreementError,
    FormulaError,
    IdentificationError,
    MixbridgeError,
    OptionError,
)
from mixbridge.moments import Moments, OpenMoments
from mixbridge.routes import Fit
from mixbridge.study import Study, crosscheck

__all__ = [
    "DataError",
    "DisagreementError",
    "Fit",
    "FormulaError",
    "IdentificationError",
    "MixbridgeError",
    "Moments",
    "OpenMoments",
    "OptionError",
    "Study",
    "crosscheck",
    "demo",
]
