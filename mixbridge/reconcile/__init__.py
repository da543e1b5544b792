"""Reconciliation: which figures must agree, and whether they do."""

from mixbridge.reconcile.agreement import Interval, Thresholds, expected_identity, ledger
from mixbridge.reconcile.cautions import IDENTITIES_HEADING, IDENTITIES_LIMIT
from mixbridge.reconcile.identities import Identity, Rows, check_identities, identity_table

__all__ = [
    "IDENTITIES_HEADING",
    "IDENTITIES_LIMIT",
    "Identity",
    "Interval",
    "Rows",
    "Thresholds",
    "check_identities",
    "expected_identity",
    "identity_table",
    "ledger",
]
