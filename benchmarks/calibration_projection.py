"""Size and power of the tests inside the projection of unit effects on all periods.

Run ``python -m benchmarks.calibration_projection --replicates 1000 --write docs/calibration.md``: it writes its section
of that page anew and leaves the rest. Power is that of a stated alternative.
"""

from __future__ import annotations

import argparse
import time
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from benchmarks.calibration_text import cell, markdown
from mixbridge.study import crosscheck

__all__ = ["DESIGNS", "Design", "calibrate", "kept", "section"]

FloatArray = NDArray[np.float64]
MARK = "## Tests of the projection"
SEED = 40_260
LEVEL = 0.05


@dataclass(frozen=True)
class Design:
    """A balanced panel with one covariate and a unit-constant one.

    Attributes
    ----------
    name : str
    units, periods : int
    psi : float
        Variance ratio; the error variance is one.
    tails : str
        ``normal``, or ``unequal``: the standard deviation of the error is ``exp(0.4 x)``.
    indicators : bool
        Whether the model has an indicator per period.
    """

    name: str
    units: int
    periods: int
    psi: float = 1.0
    tails: str = "normal"
    indicators: bool = False


DESIGNS = (
    Design("60 units, 3 periods", 60, 3),
    Design("200 units, 3 periods", 200, 3),
    Design("200 units, 5 periods", 200, 5),
    Design("500 units, 4 periods, indicators", 500, 4, indicators=True),
    Design("200 units, large unit effects", 200, 3, psi=8.0),
    Design("200 units, unequal variances", 200, 3, tails="unequal"),
    Design("500 units, unequal variances", 500, 3, tails="unequal"),
)

ALTERNATIVES = {
    "first_period": "the unit effect has 0.4 times the covariate of the first period added",
    "unit_mean": "the unit effect has 0.6 times the mean of the covariate added",
    "feedback": "the covariate has 0.5 times the error of the period before added",
}


def draw(design: Design, rng: np.random.Generator, broken: str = "") -> pd.DataFrame:
    """Draw one panel; every restriction of the projection holds unless `broken` names an alternative."""
    n, t = design.units, design.periods
    w, effect = rng.normal(size=n), np.sqrt(design.psi) * rng.normal(size=n)
    u = rng.normal(size=(n, t))
    x = rng.normal(size=(n, t)) + rng.normal(size=(n, 1))
    if broken == "feedback":
        x[:, 1:] += 0.5 * u[:, :-1]
    if broken == "first_period":
        effect = effect + 0.4 * x[:, 0]
    if broken == "unit_mean":
        effect = effect + 0.6 * x.mean(axis=1)
    if design.tails == "unequal":
        u = u * np.exp(0.4 * x)
    y = 1.0 + x + 0.5 * w[:, None] + effect[:, None] + u
    unit, period = np.divmod(np.arange(n * t), t)
    return pd.DataFrame({"y": y.ravel(), "x": x.ravel(), "w": w[unit], "unit": unit, "period": period})


def p_values(design: Design, data: pd.DataFrame) -> dict[str, float]:
    """Return the p value of every test on one panel."""
    formula = "y ~ x + w + C(period)" if design.indicators else "y ~ x + w"
    study = crosscheck(formula, data, unit="unit", period="period", routes=("reml", "within"))
    wide = study.correlated("chamberlain")
    found = {}
    for covariance in ("model", "CR1"):
        table = wide.projection_tests(covariance=covariance).set_index("tested")["p_value"]
        found |= {f"{tested}, F with {covariance}": float(table[tested]) for tested in table.index}
    for row in study.minimum_distance().tests.itertuples(index=False):
        found[f"{row.tested}, {row.weights} distance"] = float(row.p_value)
        found[f"{row.tested}, {row.weights} distance, few units"] = float(row.p_few_units)
    return found


NOT_NULL = {
    "first_period": "overidentification",  # the projection holds: only feedback breaks it
    "unit_mean": "overidentification",
}


def calibrate(
    designs: Iterable[Design] = DESIGNS, replicates: int = 1_000, seed: int = SEED, *, powers: bool = True
) -> pd.DataFrame:
    """Tabulate size under the null and power against stated alternatives.

    Parameters
    ----------
    designs : iterable of Design
    replicates : int
        Per design; a quarter of it for each alternative.
    seed : int
    powers : bool
        Whether alternatives are drawn too.

    Returns
    -------
    DataFrame
        ``design, test, what, alternative, nominal, observed, error, z, defined``; the error is the Monte
        Carlo standard error, at the nominal value for sizes. Where an alternative leaves a null true, it is a size.
    """
    rows = []
    for number, design in enumerate(designs):
        for place, broken in enumerate(("", *(ALTERNATIVES if powers else ()))):
            rng = np.random.default_rng([seed, number, place])
            count = max(1, replicates // 4) if broken else replicates
            found = pd.DataFrame([p_values(design, draw(design, rng, broken)) for _ in range(count)])
            for test in found.columns:
                p = found[test].dropna().to_numpy()
                observed = float((p <= LEVEL).mean()) if p.size else np.nan
                null = not broken or test.startswith(NOT_NULL.get(broken, "-"))
                null = null or (broken == "unit_mean" and test.startswith("equal over periods"))
                at = LEVEL if null else observed
                error = float(np.sqrt(at * (1.0 - at) / max(p.size, 1)))
                z = (observed - LEVEL) / error if null else np.nan
                known = (design.name, test, "size" if null else "power", observed, error, z, p.size / count)
                rows.append((*known[:3], broken, LEVEL, *known[3:]))
    names = ["design", "test", "what", "alternative", "nominal", "observed", "error", "z", "defined"]
    return pd.DataFrame(rows, columns=names)


def section(table: pd.DataFrame, replicates: int, seconds: float) -> str:
    """Return the section of the page of documentation."""
    lines = [
        MARK,
        "",
        f"`python -m benchmarks.calibration_projection --replicates {replicates} --write docs/calibration.md`, "
        f"{seconds / 60:.1f} min, seed {SEED}. Rejected at 5 %, in percent of {replicates:,} samples (power: "
        f"{replicates // 4:,}); marks as above. F: the augmented regression by `reml` with Satterthwaite or "
        "cluster-robust references; distance: minimum distance on the reduced form with the stated weights, with its "
        "reference in large samples and with that for few units, both robust to unequal variances. Optimal weights "
        "need many units per coefficient of the reduced form.",
        "",
        "### Size",
        "",
        _across(table[(table["what"] == "size") & (table["alternative"] == "")]),
    ]
    for name, what in ALTERNATIVES.items():
        rows = table[table["alternative"] == name]
        if len(rows):
            lines += ["", f"### {what[0].upper()}{what[1:]}", "", _across(rows)]
    return "\n".join(lines) + "\n"


def _across(rows: pd.DataFrame) -> str:
    designs = list(dict.fromkeys(rows["design"]))
    body = []
    for test, group in rows.groupby("test", sort=False):
        by_design = group.set_index("design")
        cells = []
        for design in designs:
            row = by_design.loc[design]
            missing = not np.isfinite(row["observed"])
            shown = f"{100 * row['observed']:.1f}" if row["what"] == "power" else cell(row, False)
            cells.append("none" if missing else shown)
        body.append([str(test), *cells])
    return markdown(["test", *designs], body)


def kept(page: Path) -> str:
    """Return the section that a page has already, to be kept when the rest is written anew."""
    if not page.exists():
        return ""
    text = page.read_text(encoding="utf-8")
    return text[text.index(MARK) :] if MARK in text else ""


def main() -> int:
    """Run from the command line."""
    parser = argparse.ArgumentParser(prog="python -m benchmarks.calibration_projection", description=__doc__)
    parser.add_argument("--replicates", type=int, default=1_000, help="per design")
    parser.add_argument("--write", type=Path, metavar="FILE", help="page whose section is written anew")
    given = parser.parse_args()
    start = time.perf_counter()
    table = calibrate(replicates=given.replicates)
    text = section(table, given.replicates, time.perf_counter() - start)
    print(text)
    if given.write is not None:
        page = given.write.read_text(encoding="utf-8") if given.write.exists() else ""
        head = page[: page.index(MARK)] if MARK in page else page.rstrip() + "\n\n"
        given.write.write_text(head + text, encoding="utf-8")
    return 0


if __name__ == "__main__":
    raise SystemExit(main())
