"""Records of an audit: what it needs from a study, one finding per row, and the whole table."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from types import MappingProxyType
from typing import Protocol

import numpy as np
import pandas as pd

from mixbridge.display import Printed
from mixbridge.display.text import wrapped
from mixbridge.errors import OptionError
from mixbridge.moments import Moments, OpenMoments
from mixbridge.moments.products import UnitProducts
from mixbridge.panel import Panel
from mixbridge.ratio import Curve
from mixbridge.routes import Fit

__all__ = ["COLUMNS", "COMPUTED", "NO_PERIOD", "NO_TEST", "Audit", "Finding", "StudyView"]

COLUMNS = (
    "assumption",
    "evidence",
    "statistic",
    "reference",
    "p_value",
    "departure",
    "consequence",
    "conclusion",
    "status",
)
COMPUTED = "computed"
NO_TEST = "no test"
NO_PERIOD = "not assessable: no period"


class StudyView(Protocol):
    """What an audit needs from a study."""

    @property
    def panel(self) -> Panel:
        """Rows, units, periods."""

    @property
    def opened(self) -> OpenMoments:
        """Counts and means per unit."""

    @property
    def moments(self) -> Moments:
        """Closed moments."""

    @property
    def curve(self) -> Curve:
        """The panel reduced to what depends on the variance ratio."""

    @property
    def products(self) -> UnitProducts:
        """Products of every unit's rows."""

    @property
    def fits(self) -> Mapping[str, Fit]:
        """Every route shown."""

    @property
    def primary(self) -> str:
        """The route that is reported."""

    def fit(self, route: str, **conventions: object) -> Fit:
        """Fit one route."""


@dataclass(frozen=True, slots=True)
class Finding:
    """One row of an audit.

    Attributes
    ----------
    key : str
        Name of the row.
    evidence : str
        What was computed.
    statistic : float
        NaN where there is no test.
    reference : str
        Distribution of the statistic if the assumption holds.
    p_value : float
        From that reference.
    departure : str
        Size of the departure, in units that matter.
    consequence : str
        What the departure would do to which routes.
    conclusion : str
        What may and may not be concluded.
    status : str
        ``computed``, ``no test``, ``not assessable: <reason>`` or ``not computed: <reason>``.
    numbers : mapping of str to float
        The figures behind the words, unrounded.
    assumption : str
        Filled in by the registry.
    """

    key: str
    evidence: str
    statistic: float = np.nan
    reference: str = ""
    p_value: float = np.nan
    departure: str = ""
    consequence: str = ""
    conclusion: str = ""
    status: str = COMPUTED
    numbers: Mapping[str, float] = field(default_factory=dict)
    assumption: str = ""

    def __post_init__(self) -> None:
        """Make the mapping read-only."""
        object.__setattr__(self, "numbers", MappingProxyType(dict(self.numbers)))


@dataclass(frozen=True, slots=True)
class Audit(Printed):
    """Every assumption that the routes share, with what the data can and cannot show.

    Attributes
    ----------
    header : tuple of str
        Sentences that belong before the table.
    findings : tuple of Finding
        In the order of the registry.
    level : float
        Level at which conclusions speak of rejection.
    power : float
        Power of the detectable departures.
    """

    header: tuple[str, ...]
    findings: tuple[Finding, ...]
    level: float
    power: float

    @property
    def table(self) -> pd.DataFrame:
        """The findings; columns as in `COLUMNS`, index the keys of the rows."""
        rows = [[getattr(item, name) for name in COLUMNS] for item in self.findings]
        index = pd.Index([item.key for item in self.findings], name="row")
        return pd.DataFrame(rows, columns=list(COLUMNS), index=index)

    @property
    def numbers(self) -> pd.DataFrame:
        """The figures behind the words: columns ``row, quantity, value``."""
        rows = [(item.key, name, value) for item in self.findings for name, value in item.numbers.items()]
        return pd.DataFrame(rows, columns=["row", "quantity", "value"])

    def __getitem__(self, key: str) -> Finding:
        """Return one finding by its key."""
        for item in self.findings:
            if item.key == key:
                return item
        raise OptionError.not_among("row", key, [item.key for item in self.findings])

    def __iter__(self) -> Iterator[Finding]:
        """Iterate over the findings."""
        return iter(self.findings)

    def __len__(self) -> int:
        """Return the number of findings."""
        return len(self.findings)

    def __str__(self) -> str:
        """Return header and findings as text, one paragraph per row."""
        return "\n\n".join(["\n".join(wrapped(self.header)), *(_paragraph(item) for item in self.findings)])


def _paragraph(item: Finding) -> str:
    statistic = ""
    if np.isfinite(item.statistic):
        statistic = f"{item.statistic:.4g}"
        if np.isfinite(item.p_value):
            statistic += f"; {item.reference}; p = {item.p_value:.3g}"
    named = {
        "evidence": item.evidence,
        "status": "" if item.status == COMPUTED else item.status,
        "statistic": statistic,
        "departure": item.departure,
        "consequence": item.consequence,
        "conclusion": item.conclusion,
    }
    lines = wrapped([f"{item.assumption} [{item.key}]"])
    for name, text in named.items():
        lines += wrapped([text], f"  {name:<12} ", " " * 15)
    return "\n".join(lines)
