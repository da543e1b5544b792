"""mixbridge: one random-intercept model, every route to its estimates, one ledger of where they agree and differ."""

from importlib import import_module

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
from mixbridge.sources.chunk_options import ChunkOptions
from mixbridge.study import Study, adopt, crosscheck, from_moments

_LATER = {
    "UnitProducts": "mixbridge.moments.products",
    "crosswalk": "mixbridge.reconcile.crosswalk",
    "match_reported": "mixbridge.reconcile.match",
    "read_figures": "mixbridge.reconcile.printed_file",
    "rehearse": "mixbridge.rehearse",
    "shared_moments": "mixbridge.study.suppression",
    "verify": "mixbridge.study.verify",
}

__all__ = [
    "ChunkOptions",
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
    "adopt",
    "crosscheck",
    "crosswalk",
    "demo",
    "from_moments",
    "match_reported",
    "read_figures",
    "rehearse",
    "shared_moments",
    "verify",
]


def __getattr__(name: str) -> object:
    """Hand on names whose files are loaded when first asked for."""
    if name in _LATER:
        module = import_module(_LATER[name])
        return module if name == "rehearse" else getattr(module, name)
    raise AttributeError(f"module 'mixbridge' has no attribute {name!r}")
