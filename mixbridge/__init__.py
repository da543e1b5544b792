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
from mixbridge.moments.products import UnitProducts
from mixbridge.reconcile.crosswalk import crosswalk
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
    "UnitProducts",
    "crosscheck",
    "crosswalk",
    "demo",
]
