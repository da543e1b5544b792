"""One printed figure: the text as printed, and the numbers it can stand for.

A text with a last digit worth u stands, where the printer rounded to nearest, for the closed interval
``[v - u/2, v + u/2]`` (both ends, so that rounding half up, half down and half to even are all allowed), and where
it cut the further digits off, for ``[v, v + u]`` away from zero. A sign that was printed is kept: ``-0.00`` stands
for numbers not above zero.
"""

from __future__ import annotations

import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from decimal import Decimal

from mixbridge.errors import DataError
from mixbridge.reconcile.printed_quantities import canonical_quantity

__all__ = ["PrintedFigure", "figure_list", "parse_figure"]

Interval = tuple[float, float]

_NUMBER = re.compile(
    r"(?P<sign>[+-]?)(?P<whole>\d{1,3}(?:,\d{3})+|\d*)(?P<point>\.?)(?P<rest>\d*)(?:[eE](?P<power>[+-]?\d{1,3}))?"
)
_MINUS = str.maketrans({"−": "-", "–": "-", "\N{FULLWIDTH HYPHEN-MINUS}": "-"})


@dataclass(frozen=True, slots=True)
class PrintedFigure:
    """A figure as somebody printed it.

    Attributes
    ----------
    quantity : str
        What it is, for example ``b:forage``, ``se:forage``, ``icc``, ``sigma_u``.
    text : str
        As printed.
    value : float
        The number that the text names.
    digits : int
        Significant digits printed; zeros count where nothing else is printed.
    half_unit : float
        Half a unit of the last printed digit.
    interval : tuple of (float, float)
        What a figure rounded to nearest can stand for.
    cut : tuple of (float, float)
        What a figure whose further digits were cut off can stand for.
    """

    quantity: str
    text: str
    value: float
    digits: int
    half_unit: float
    interval: Interval
    cut: Interval

    @property
    def widest(self) -> Interval:
        """Return what it can stand for under either."""
        return min(self.interval[0], self.cut[0]), max(self.interval[1], self.cut[1])

    def units_off(self, value: float) -> float:
        """Return ``value - printed`` in units of the last printed digit."""
        return (value - self.value) / (2.0 * self.half_unit)


def parse_figure(quantity: str, text: str, where: str = "") -> PrintedFigure:
    """Read one figure.

    Parameters
    ----------
    quantity : str
        What was printed; `mixbridge.reconcile.printed_quantities.QUANTITIES` lists the names.
    text : str
        Decimal digits with an optional sign, point, thousands commas and exponent: ``0.110``, ``.11``, ``-.5``,
        ``1,764.05``, ``2.3e-4``. Stars of significance are dropped, and so are parentheses around a standard error
        or a test statistic.
    where : str
        Where it stands, for the message.

    Returns
    -------
    PrintedFigure

    Raises
    ------
    DataError
        If the text is no such number.

    Examples
    --------
    >>> from mixbridge.reconcile.printed import parse_figure
    >>> figure = parse_figure("icc", ".72")
    >>> figure.digits, figure.half_unit, figure.interval
    (2, 0.005, (0.715, 0.725))
    """
    name = canonical_quantity(quantity, where)
    place = f"{where}: " if where else ""
    if not isinstance(text, str):
        raise DataError(
            f"{place}{quantity} is {text!r}, a {type(text).__name__}; give the text as printed, in quotes, so that "
            "it is known to how many digits it was rounded."
        )
    bare = text.strip().translate(_MINUS).rstrip("*").strip()
    kind = name.partition(":")[0]
    if kind in ("se", "z", "t") and bare.startswith("(") and bare.endswith(")"):
        bare = bare[1:-1].strip()
    found = _NUMBER.fullmatch(bare)
    if found is None or not (found["whole"] or found["rest"]):
        raise DataError(f"{place}{quantity} = {text!r} is not a printed number{_hint(bare)}.")
    whole, rest = found["whole"].replace(",", ""), found["rest"]
    power = int(found["power"] or 0) - len(rest)
    magnitude = Decimal(whole + rest).scaleb(power)
    unit = Decimal(1).scaleb(power)
    negative = found["sign"] == "-"
    value = -magnitude if negative else magnitude
    low, high = value - unit / 2, value + unit / 2
    cut = (value - unit, value) if negative else (value, value + unit)
    if magnitude == 0:
        low, cut = (low, (-unit, unit)) if not negative else (low, (-unit, Decimal(0)))
        high = Decimal(0) if negative else high
    shown = (whole + rest).lstrip("0")
    return PrintedFigure(
        quantity=name,
        text=text.strip(),
        value=float(value),
        digits=len(shown) if shown else max(len(rest), 1),
        half_unit=float(unit / 2),
        interval=(float(low), float(high)),
        cut=(float(cut[0]), float(cut[1])),
    )


def figure_list(figures: object) -> tuple[PrintedFigure, ...]:
    """Read a mapping of quantity to text, or a list of pairs or of figures.

    Parameters
    ----------
    figures : mapping, or iterable of pairs or of PrintedFigure

    Returns
    -------
    tuple of PrintedFigure
        In the order given.

    Raises
    ------
    DataError
        If there is none, if one is given twice, or if one cannot be read.
    """
    items: list[object]
    if isinstance(figures, Mapping):
        items = list(figures.items())
    elif isinstance(figures, Iterable) and not isinstance(figures, str):
        items = list(figures)
    else:
        raise DataError(
            f"figures is a {type(figures).__name__}; give a mapping such as {{'b:forage': '0.12', 'icc': '.41'}}."
        )
    read: dict[str, PrintedFigure] = {}
    for place, item in enumerate(items, start=1):
        if isinstance(item, PrintedFigure):
            figure = item
        elif isinstance(item, (tuple, list)) and len(item) == 2 and isinstance(item[0], str):
            figure = parse_figure(item[0], item[1], f"figure {place}")
        else:
            raise DataError(f"figure {place} is {item!r}; give a pair of quantity and printed text.")
        if figure.quantity in read:
            raise DataError(f"figure {place}: {figure.quantity!r} is given twice.")
        read[figure.quantity] = figure
    if not read:
        raise DataError("no figures given; give at least one, for example {'b:forage': '0.12'}.")
    return tuple(read.values())


def _hint(text: str) -> str:
    if re.fullmatch(r"[+-]?\d*,\d+(e[+-]?\d+)?", text):
        return "; write the decimal sign as a point, and thousands in groups of three"
    if text.startswith(("<", ">")):
        return "; a bound names no figure, leave it out"
    if text.startswith("("):
        return "; parentheses are read around standard errors and z or t only, write a negative number with a minus"
    return "; write it like 0.110, -.5, 1,764.05 or 2.3e-4"
