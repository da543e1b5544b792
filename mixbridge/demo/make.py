"""Make the invented apiary data: ``python -m mixbridge.demo.make`` rewrites ``apiaries.csv`` beside it.

Nothing here was observed. Forty-eight apiaries are followed over at most nine seasons (2013 to 2021)::

    honey = 14 + 0.20 * forage + 0.90 * feeding - 0.006 * (altitude - 500) + quality + noise

==========  ==========================================================================================
honey       yield of a season, kg per hive
forage      index of forage within flying distance; varies over apiaries and over seasons, unrelated
            to quality
feeding     kg of sugar fed per hive; 9 - 0.30 * quality + habit of the keeper (standard deviation
            0.8) + a part that varies from season to season (standard deviation 1.8)
altitude    metres above the sea, 150 to 1050; constant within an apiary, unrelated to quality
quality     the unit effect, never shown: normal, standard deviation 4 (unit variance 16)
noise       the idiosyncratic error: normal, standard deviation 4 (idiosyncratic variance 16)
==========  ==========================================================================================

A keeper feeds a poor apiary more, so feeding is negatively related to the unit effect. Within an apiary a
kilogram of sugar adds 0.90 kg of honey. Between apiaries the better ones are fed less, which hides that and
more: with nine seasons the expected slope between apiaries is
0.90 - 0.30 * 16 / (0.30**2 * 16 + 0.8**2 + 1.8**2 / 9) = -1.07. Routes that assume unit effects unrelated to
the covariates land in between, each elsewhere. They agree about forage, and about altitude except for its
standard error.

Seasons are skipped at random, some apiaries have one season only, and four yields and three forage indices
were never written down. The seed was chosen, among the first forty, because the estimates then show what
the paragraph above says.

The draws use `random.Random.random`, whose sequence Python guarantees, and `statistics.NormalDist.inv_cdf`,
so that every version of Python writes the same file.
"""

from __future__ import annotations

import random
from pathlib import Path
from statistics import NormalDist

__all__ = ["FILE", "HEADER", "as_csv", "rows"]

FILE = Path(__file__).with_name("apiaries.csv")
HEADER = ("apiary", "season", "honey", "forage", "feeding", "altitude")

_SEED = 37
_APIARIES = 48
_SEASONS = range(2013, 2022)
_STANDARD_NORMAL = NormalDist()

Row = tuple[str, int, float | None, float | None, float, int]


def rows() -> list[Row]:
    """Draw the data.

    Returns
    -------
    list of tuple
        One row per apiary and season, in the order of `HEADER`; ``None`` where nothing was written down.
    """
    source = random.Random(_SEED)
    drawn: list[Row] = []
    for number in range(1, _APIARIES + 1):
        drawn.extend(_apiary(source, number))
    without = random.Random(_SEED).sample(range(len(drawn)), 7)
    for row in without[:4]:
        drawn[row] = (*drawn[row][:2], None, *drawn[row][3:])
    for row in without[4:]:
        drawn[row] = (*drawn[row][:3], None, *drawn[row][4:])
    return drawn


def as_csv() -> str:
    """Write the data as text.

    Returns
    -------
    str
        A header and one line per row; a missing value is an empty cell.
    """
    lines = [HEADER, *rows()]
    return "".join(",".join("" if cell is None else str(cell) for cell in line) + "\n" for line in lines)


def _apiary(source: random.Random, number: int) -> list[Row]:
    quality = _normal(source, 0.0, 4.0)
    altitude = round(150 + 900 * source.random())
    usual_forage = _normal(source, 50.0, 5.0)
    usual_feeding = 9 - 0.30 * quality + _normal(source, 0.0, 0.8)
    seen = _seasons_seen(source, number)
    kept: list[Row] = []
    for season in _SEASONS:
        forage = round(_normal(source, usual_forage, 9.0), 1)
        feeding = round(max(0.0, _normal(source, usual_feeding, 1.8)), 1)
        noise = _normal(source, 0.0, 4.0)
        honey = 14 + 0.20 * forage + 0.90 * feeding - 0.006 * (altitude - 500) + quality + noise
        if season in seen:
            kept.append((f"A{number:02d}", season, round(honey, 1), forage, feeding, altitude))
    return kept


def _seasons_seen(source: random.Random, number: int) -> set[int]:
    """Choose the seasons of one apiary: every thirteenth has one, the others start late, stop early, skip."""
    if number % 13 == 8:
        return {_SEASONS[int(len(_SEASONS) * source.random())]}
    first = int(5 * source.random()) if source.random() < 0.35 else 0
    stop = len(_SEASONS)
    if source.random() >= 0.8:
        stop = first + 2 + int((len(_SEASONS) - 2 - first) * source.random())
    seen = {_SEASONS[k] for k in range(first, stop) if source.random() < 0.9}
    return seen or {_SEASONS[first]}


def _normal(source: random.Random, mean: float, standard_deviation: float) -> float:
    return mean + standard_deviation * _STANDARD_NORMAL.inv_cdf(source.random())


if __name__ == "__main__":
    FILE.write_text(as_csv(), encoding="utf-8", newline="\n")
