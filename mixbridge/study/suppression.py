"""Moments that may be shared: without small size classes, with the effect on every estimate."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from mixbridge.display import Printed
from mixbridge.display.text import frame_lines, wrapped
from mixbridge.moments.suppression import suppress
from mixbridge.study.from_moments import from_moments
from mixbridge.study.record import Study

__all__ = ["Shared", "shared_moments"]


@dataclass(frozen=True, slots=True, eq=False)
class Shared(Printed):
    """A study on the moments that are left.

    Attributes
    ----------
    study : Study
        From the moments that are left; ``study.moments`` is what may be shared.
    left_out : DataFrame
        Columns ``size, units, rows``.
    effect : DataFrame
        Columns ``route, term, before, after, moved_in_se``: estimates with all units and with those left, their
        difference in standard errors of the first.
    note : str
        What leaving out does.
    """

    study: Study
    left_out: pd.DataFrame
    effect: pd.DataFrame
    note: str = field(
        default="Leaving out size classes selects units by size: where size carries information estimates move, and no "
        "threshold makes moments anonymous by itself."
    )

    def __str__(self) -> str:
        """Return what was left out, and the estimates that this moves most."""
        moved = self.effect.loc[self.effect["moved_in_se"].abs().sort_values(ascending=False).index]
        left = int(self.left_out["units"].sum())
        head = f"{left} units left out, {self.study.moments.units} shared"
        most = ["Estimates that move most, in standard errors with all units:", *frame_lines(moved, most=8)]
        return "\n".join([head, *frame_lines(self.left_out), *most, *wrapped([self.note])])


def shared_moments(study: Study, threshold: int = 5) -> Shared:
    """Leave out size classes of few units and say what that does.

    Parameters
    ----------
    study : Study
    threshold : int
        Classes of fewer units are left out: a class of one unit gives away its means.

    Returns
    -------
    Shared
        The study of what is left, what was left out, and what that does to every estimate.

    Examples
    --------
    >>> import mixbridge
    >>> study = mixbridge.crosscheck("honey ~ forage", mixbridge.demo.apiaries(), unit="apiary")
    >>> shared = mixbridge.shared_moments(study, 5)
    >>> int(shared.study.moments.counts.min())
    5
    """
    found = suppress(study.products if study.has_unit_records else study.moments, threshold)
    rest = from_moments(
        found.moments,
        formula=study.panel.formula,
        unit=study.panel.unit_name,
        period=study.panel.period_name,
        terms=study.panel.terms,
        primary=study.primary,
        routes=study.routes,
        confidence=study.confidence,
        source_note=f"moments without unit sizes shared by fewer than {threshold} units",
    )
    rows = []
    for route, before in study.fits.items():
        if route == "first_difference":
            continue
        after = rest.fits[route]
        errors = before.standard_errors.to_numpy()
        for term, one, two, error in zip(before.terms, before.beta, after.beta, errors, strict=True):
            moved = (two - one) / error if error > 0.0 else np.nan
            rows.append((route, term, float(one), float(two), float(moved)))
    return Shared(
        study=rest,
        left_out=pd.DataFrame(list(found.left_out), columns=["size", "units", "rows"]),
        effect=pd.DataFrame(rows, columns=["route", "term", "before", "after", "moved_in_se"]),
    )
