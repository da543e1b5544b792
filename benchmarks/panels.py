"""Seeded panels of the sizes that the benchmarks need."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from mixbridge.moments import Moments, collect

FloatArray = NDArray[np.float64]
BLOCK = 8192


@dataclass(frozen=True, slots=True)
class Panel:
    """Rows in random order: design (the first column is the constant), outcome, integer unit codes, period."""

    x: FloatArray
    y: FloatArray
    codes: NDArray[np.int64]
    period: NDArray[np.int64]

    @property
    def names(self) -> list[str]:
        return ["Intercept", *(f"x{j}" for j in range(1, self.x.shape[1]))]

    @property
    def formula(self) -> str:
        return "y ~ " + " + ".join(self.names[1:])

    def frame(self) -> pd.DataFrame:
        """Return the rows as a frame with integer and text keys."""
        columns = {name: self.x[:, j].copy() for j, name in enumerate(self.names) if j}
        keys = np.char.add("unit-", self.codes.astype(str)).astype(object)
        return pd.DataFrame(
            {"y": self.y, **columns, "unit": self.codes, "unit_text": keys, "period": self.period}
        )


def panel(units: int, columns: int = 10, largest: int = 19, seed: int = 20, ratio: float = 0.5) -> Panel:
    """Draw a panel with units of ``1 .. largest`` rows, each size about equally often.

    Half of the covariates' variance lies between units; the last one is constant within units.
    """
    rng = np.random.default_rng(seed)
    sizes = np.resize(np.arange(1, largest + 1), units)
    unit = np.repeat(np.arange(units), sizes)
    period = np.arange(unit.size) - np.repeat(np.cumsum(sizes) - sizes, sizes)
    order = rng.permutation(unit.size)
    codes, period = unit[order], period[order]
    x = rng.standard_normal((codes.size, columns))
    x += rng.standard_normal((units, columns))[codes]
    x[:, 0] = 1.0
    x[:, -1] = rng.standard_normal(units)[codes]
    effect = np.sqrt(ratio) * rng.standard_normal(units)
    y = x.sum(axis=1) + effect[codes] + rng.standard_normal(codes.size)
    return Panel(x, y, codes, period)


def moments_of_sizes(sizes: NDArray[np.int64], columns: int = 10, seed: int = 21) -> Moments:
    """Take the moments of a panel with these unit sizes; its rows are drawn block by block and not kept."""
    unit = np.repeat(np.arange(sizes.size), sizes)
    rng = np.random.default_rng(seed)
    level = rng.standard_normal((sizes.size, columns))
    effect = 0.7 * rng.standard_normal(sizes.size)

    def blocks() -> Iterator[tuple[NDArray[np.intp], FloatArray, FloatArray]]:
        for start in range(0, unit.size, BLOCK):
            codes = unit[start : start + BLOCK]
            draw = np.random.default_rng([seed, start])
            x = draw.standard_normal((codes.size, columns)) + level[codes]
            x[:, 0] = 1.0
            x[:, -1] = level[codes, -1]
            yield codes, x, x.sum(axis=1) + effect[codes] + draw.standard_normal(codes.size)

    names = (*(f"x{j}" for j in range(columns)), "y")
    return collect(blocks, names, pd.RangeIndex(sizes.size))[1]
