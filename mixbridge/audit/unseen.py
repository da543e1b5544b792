"""What the data at hand cannot show, said as such."""

from __future__ import annotations

from collections.abc import Sequence

from mixbridge.audit.bench import Bench
from mixbridge.audit.record import NO_TEST, Finding

__all__ = ["same_period", "sample_of_units"]


def sample_of_units(bench: Bench) -> Sequence[Finding]:
    """Say what a sample cannot show about itself."""
    units, rows = bench.curve.units, bench.curve.n
    return [
        Finding(
            key="one_sample",
            evidence=f"none in the data: {units} units, {rows} rows, as given",
            departure="not known",
            consequence="with units drawn together (regions, waves, families) all standard errors are "
            "too small; with units chosen by "
            "outcome all routes are biased for the population",
            conclusion="Whether units were drawn independently and from the population of interest, what "
            "was lost before the data "
            "were made, and whether units influence one another other than over common periods is "
            "knowledge about the study, not in "
            "the data. No row of this table speaks to it.",
            status=NO_TEST,
        )
    ]


def same_period(bench: Bench) -> Sequence[Finding]:
    """Say what no residual shows."""
    return [
        Finding(
            key="same_period",
            evidence="none in the data: residuals are unrelated to the columns in the model by construction",
            departure="not known",
            consequence="all routes, within and first_difference included, would be biased; errors of "
            "measurement bias within and "
            "first_difference more than between",
            conclusion="Omitted variables that vary over time, reverse causality within a period and "
            "errors of measurement leave no "
            "trace in residuals. Unit means do not cure them. Gaps between routes are hints only.",
            status=NO_TEST,
        )
    ]
