"""What theory says must agree, checked on the data at hand: these check the arithmetic, not the model."""

from mixbridge.reconcile.identities import (
    ends,
    iteration,
    moments_agree,
    restricted,
    tests_agree,
    unit_means,
    weighting,
)
from mixbridge.reconcile.identities.registry import (
    DOES_NOT_APPLY,
    FAILS,
    HOLDS,
    REGISTRY,
    Compared,
    Identity,
    Unmet,
    identity,
)
from mixbridge.reconcile.identities.setting import Rows, Setting
from mixbridge.reconcile.identities.table import check_identities, identity_table

__all__ = [
    "DOES_NOT_APPLY",
    "FAILS",
    "HOLDS",
    "REGISTRY",
    "Compared",
    "Identity",
    "Rows",
    "Setting",
    "Unmet",
    "check_identities",
    "ends",
    "identity",
    "identity_table",
    "iteration",
    "moments_agree",
    "restricted",
    "tests_agree",
    "unit_means",
    "weighting",
]
