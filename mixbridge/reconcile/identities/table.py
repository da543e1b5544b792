"""All identities on one panel, and their table."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import asdict, fields

import pandas as pd

from mixbridge.moments import Moments
from mixbridge.ratio import Curve
from mixbridge.reconcile.identities.registry import REGISTRY, Identity, result
from mixbridge.reconcile.identities.setting import Rows, setting_of
from mixbridge.routes import Fit

__all__ = ["check_identities", "identity_table"]


def check_identities(
    curve: Curve,
    fits: Mapping[str, Fit],
    rows: Rows | None = None,
    *,
    with_means: tuple[Moments, Mapping[str, str]] | None = None,
) -> tuple[Identity, ...]:
    """Check every registered identity on one panel.

    They check the arithmetic, not the model.

    Parameters
    ----------
    curve : Curve
        The panel.
    fits : mapping of str to Fit
        Fits by ledger key. Those on other rows (one-row units dropped) are left out.
    rows : Rows, optional
        Rows, for what is checked on rows too.
    with_means : (Moments, mapping), optional
        Moments with unit means that were fitted elsewhere, with each mean column's source, to be checked in
        place of
        those that are taken here from the moments.

    Returns
    -------
    tuple of Identity
        In the order of their numbers.
    """
    setting = setting_of(curve, fits, rows, with_means)
    rules = sorted(REGISTRY.values(), key=lambda rule: rule.number)
    return tuple(result(rule, setting) for rule in rules)


def identity_table(identities: Iterable[Identity]) -> pd.DataFrame:
    """Return one row per identity, with the fields of `Identity` as columns."""
    return pd.DataFrame(
        [asdict(one) for one in identities], columns=[field.name for field in fields(Identity)]
    )
