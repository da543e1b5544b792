"""Read a design and a truth from a small TOML file."""

from __future__ import annotations

import tomllib
from pathlib import Path
from typing import Any

from mixbridge.errors import DataError, OptionError, nearest
from mixbridge.rehearse.design import Design
from mixbridge.rehearse.truth import Truth

__all__ = ["read_design"]

DESIGN = ("units", "sizes", "covariates", "within_correlation", "between_correlation", "seed")
TRUTH = tuple(Truth.__dataclass_fields__)


def read_design(path: str | Path) -> tuple[Design, Truth]:
    """Read ``units``, ``sizes``, ``[covariates]``, correlations and ``[truth]``.

    Parameters
    ----------
    path : str or Path
        Correlations are lists of ``[name, name, value]``; ``sizes`` is a number, a list, or a table from rows to units.

    Returns
    -------
    Design, Truth

    Raises
    ------
    DataError
        If the file cannot be read.
    OptionError
        If it names something that a design or a truth does not have.
    """
    try:
        text = Path(path).read_text(encoding="utf-8")
        given = tomllib.loads(text)
    except (OSError, UnicodeDecodeError, tomllib.TOMLDecodeError) as reason:
        raise DataError(f"the design file {str(path)!r} cannot be read: {reason}.") from reason
    truth = given.pop("truth", {})
    _known("design", given, DESIGN)
    _known("truth", truth, TRUTH)
    if "units" not in given or "sizes" not in given:
        raise OptionError("a design needs units and sizes, for example: units = 40, sizes = 5.")
    sizes = given["sizes"]
    if isinstance(sizes, dict):
        given["sizes"] = {_whole(key): value for key, value in sizes.items()}
    given["covariates"] = {name: tuple(value) for name, value in given.get("covariates", {}).items()}
    for key in ("within_correlation", "between_correlation"):
        if key in given:
            given[key] = {(str(a), str(b)): float(value) for a, b, value in given[key]}
    return Design(**given), Truth(**truth)


def _known(where: str, given: dict[str, Any], names: tuple[str, ...]) -> None:
    for name in given:
        if name not in names:
            raise OptionError(
                f"a {where} has no {name!r}; it has: {', '.join(names)}." + nearest(name, names)
            )


def _whole(text: str) -> int:
    try:
        return int(text)
    except ValueError:
        raise OptionError(f"sizes: {text!r} is not a number of rows.") from None
