"""Size of tests and coverage of intervals by simulation; writes ``docs/calibration.md``.

Run ``python -m benchmarks.calibration --replicates 4000 --write docs/calibration.md``. The exit code is 1 if an
exact rule lies beyond Monte Carlo error, or if a rule that cannot hold is not seen failing.
"""

from __future__ import annotations

import argparse
import importlib
import importlib.util
import json
import os
import time
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
import pandas as pd
from scipy import stats

from benchmarks import calibration_coefficients, calibration_projection, calibration_variance
from benchmarks.calibration_text import LIMIT, cell, markdown, spread, title

SEEDS = {"variance": 20_260, "coefficients": 30_260, "audit": 20_080}
MARKED = 0.99
"""Share of replicates marked as exact from which a coefficient rule counts as exact for the design: marks of rules
that fail where the unit variance is estimated at zero depend on the estimates."""
FEW = 12
"""Units up to which the normal rule must be seen failing between units."""
RULES = (*calibration_coefficients.COUNTED, "satterthwaite", "kenward_roger")
ROUTES = calibration_coefficients.ROUTES
TERMS = calibration_coefficients.TERMS
AUDIT = "benchmarks.calibration_audit"


@dataclass(frozen=True)
class Part:
    """One simulated table and the seconds it took."""

    table: pd.DataFrame
    seconds: float


def run(name: str, make: Callable[[], pd.DataFrame], replicates: int, keep: Path | None) -> Part:
    """Make a table, or take it from `keep` if it was made there with the same replicates and seed."""
    made_with = {"replicates": replicates, "seed": SEEDS[name]}
    if keep is not None and (keep / f"{name}.json").exists():
        record = json.loads((keep / f"{name}.json").read_text(encoding="utf-8"))
        seconds = record.pop("seconds")
        if record == made_with:
            text = ("quantity", "route", "rule", "design", "columns", "alternative")
            table = pd.read_csv(keep / f"{name}.csv")
            found = {column: table[column].fillna("") for column in text if column in table}
            return Part(table.assign(**found), seconds)
    start = time.perf_counter()
    part = Part(make(), time.perf_counter() - start)
    if keep is not None:
        keep.mkdir(parents=True, exist_ok=True)
        part.table.to_csv(keep / f"{name}.csv", index=False)
        record = json.dumps({**made_with, "seconds": part.seconds})
        (keep / f"{name}.json").write_text(record, encoding="utf-8")
    return part


def exact_rows(variance: pd.DataFrame, coefficients: pd.DataFrame) -> pd.DataFrame:
    """Return every figure that must lie within Monte Carlo error of its nominal value."""
    first = variance[variance["exact"].astype(bool)].assign(
        theme=lambda t: np.where(t["what"] == "size", "tests of a zero unit variance", "component intervals")
    )
    second = coefficients[coefficients["exact"] >= MARKED].assign(theme="coefficient intervals")
    names = ["theme", "design", "psi", "rule", "observed", "error", "z"]
    return pd.concat([first[names], second[names]], ignore_index=True)


def must_fail(variance: pd.DataFrame, coefficients: pd.DataFrame) -> dict[str, pd.DataFrame]:
    """Return the figures of rules that cannot hold, by what is known of them."""
    model = coefficients[(coefficients["covariance"] == "model") & (coefficients["term"] == "between")]
    strong = model["psi"] >= 0.5
    normal = (model["rule"] == "normal") & strong & (model["units"] <= FEW)
    found = {
        f"normal reference, at most {FEW} units, between covariate, ψ ≥ 0.5, `{route}`": model[
            normal & (model["route"] == route)
        ]
        for route in ("reml", "swamy_arora")
    }
    pooled = (model["route"] == "pooled") & (model["rule"] == "t_rows") & strong
    found["pooled covariance, between covariate, ψ ≥ 0.5"] = model[pooled]
    sizes = variance[variance["what"] == "size"]
    found["½:½ mixture as null of the likelihood ratio"] = sizes[
        sizes["rule"] == "likelihood_ratio (mixture)"
    ]
    return found


def failing(table: pd.DataFrame) -> pd.Series:
    """Tell which figures are off in the direction that misleads: coverage too low; a test off in either way."""
    sizes = table["what"] == "size" if "what" in table else pd.Series(False, index=table.index)
    return (table["z"] < -LIMIT) | (sizes & (table["z"] > LIMIT))


def passes(variance: pd.DataFrame, coefficients: pd.DataFrame) -> bool:
    """Apply the criterion."""
    exact = exact_rows(variance, coefficients)
    seen = all(bool(failing(table).any()) for table in must_fail(variance, coefficients).values())
    return bool((exact["z"].abs() <= LIMIT).all()) and seen


def verdict(variance: pd.DataFrame, coefficients: pd.DataFrame) -> str:
    """Return the criterion with its figures."""
    exact = exact_rows(variance, coefficients)
    lines = []
    for theme, rows in exact.groupby("theme", sort=False):
        worst = rows.iloc[int(rows["z"].abs().to_numpy().argmax())]
        place = f"{worst['rule']}, {title(worst)}"
        outside = int((rows["z"].abs() > LIMIT).sum())
        lines.append([str(theme), str(len(rows)), str(outside), f"{worst['z']:.1f}", place])
    held = markdown(["exact rules", "figures", f"beyond {LIMIT} errors", "worst z", "where"], lines)
    lines = []
    for name, rows in must_fail(variance, coefficients).items():
        off = rows[failing(rows)]
        worst = rows.iloc[int(rows["z"].abs().to_numpy().argmax())]
        figures = [f"{100 * worst['observed']:.1f}", f"{worst['z']:.1f}", title(worst)]
        lines.append([name, f"{len(off)} of {len(rows)}", *figures])
    failed = markdown(["rule that cannot hold", "designs failing", "worst, %", "z", "where"], lines)
    result = (
        "**The criterion is met.**" if passes(variance, coefficients) else "**THE CRITERION IS NOT MET.**"
    )
    return f"{result}\n\n{held}\n\n{failed}"


def wide(rows: pd.DataFrame, columns: Iterable[tuple[str, pd.Series]]) -> str:
    """Return designs down and rules across."""
    columns = [(name, pick) for name, pick in columns if pick.any()]
    lines = []
    for _, group in rows.groupby(["design", "psi"], sort=False):
        first = group.iloc[0]
        found = [group[pick.loc[group.index]] for _, pick in columns]
        cells = [cell(each.iloc[0], bool(each.iloc[0]["exact"])) if len(each) else "" for each in found]
        lines.append([str(first["design"]), f"{first['psi']:g}", *cells])
    return markdown(["design", "ψ", *(name for name, _ in columns)], lines)


def tests_section(variance: pd.DataFrame) -> str:
    """Return the table of tests."""
    rows = variance[variance["what"] == "size"]
    return wide(rows, [(_spaced(rule), rows["rule"] == rule) for rule in rows["rule"].unique()])


def components_section(variance: pd.DataFrame) -> str:
    """Return one table per quantity."""
    parts = []
    for quantity, rows in variance[variance["what"] == "coverage"].groupby("quantity", sort=False):
        pairs = rows[["route", "rule"]].drop_duplicates().itertuples(index=False)
        columns = [
            (
                _spaced(rule) if route == "any" else f"{route}: {_spaced(rule)}",
                (rows["route"] == route) & (rows["rule"] == rule),
            )
            for route, rule in pairs
        ]
        parts += [f"### {str(quantity).replace('_', ' ').capitalize()}", wide(rows, columns)]
    return "\n\n".join(parts)


def summary_section(coefficients: pd.DataFrame) -> str:
    """Return one line per route, covariance and rule, over all designs."""
    lines = []
    keys = coefficients[["route", "covariance", "rule"]].drop_duplicates()
    ordered = sorted(keys.itertuples(index=False), key=lambda key: (ROUTES.index(key[0]), _order(key[1:])))
    for route, covariance, rule in ordered:
        same = (coefficients[["route", "covariance", "rule"]] == [route, covariance, rule]).all(axis=1)
        terms = [coefficients[same & (coefficients["term"] == term)] for term in TERMS]
        lines.append(
            [f"`{route}`", _covariance(covariance), _spaced(rule), *(spread(rows) for rows in terms)]
        )
    return markdown(["route", "covariance", "rule", *TERMS], lines)


def details_section(coefficients: pd.DataFrame) -> str:
    """Return two tables per design: model-based rules, robust ones."""
    parts = []
    for _, rows in coefficients.groupby(["design", "psi"], sort=False):
        first = rows.iloc[0]
        parts.append(f"### {title(first)}")
        parts.append(f"{first['units']} units, {first['rows']} rows; covariates: {first['columns']}.")
        robust = rows["covariance"].str.startswith("CR")
        for part in (rows[~robust], rows[robust]):
            parts.append(_rules_across(part))
    return "\n\n".join(parts)


def _rules_across(rows: pd.DataFrame) -> str:
    pairs = rows[["covariance", "rule"]].drop_duplicates()
    order = sorted((str(kind), str(rule)) for kind, rule in pairs.itertuples(index=False))
    order.sort(key=_order)
    heads = [_spaced(rule) if _kind(kind) == "" else f"{kind}: {_spaced(rule)}" for kind, rule in order]
    lines = []
    for route in ROUTES:
        for term in TERMS:
            here = rows[(rows["route"] == route) & (rows["term"] == term)]
            if here.empty:
                continue
            found = {
                (str(row["covariance"]), str(row["rule"])): cell(row, bool(row["exact"] >= MARKED))
                for _, row in here.iterrows()
            }
            cells = [found.get(pair, "") for pair in order]
            lines.append([f"`{route}`", term, *cells])
    return markdown(["route", "covariate", *heads], lines)


def _kind(covariance: str) -> str:
    return covariance if covariance.startswith("CR") else ""


def _order(pair: tuple[str, str]) -> tuple[str, int]:
    return _kind(pair[0]), RULES.index(pair[1])


def _covariance(name: str) -> str:
    return "adjusted" if name == "kenward_roger" else name


def _spaced(rule: str) -> str:
    return rule.replace("_", " ")


def page(parts: dict[str, Part], replicates: int, processes: int, machine: str, audit_replicates: int) -> str:
    """Return the documentation page."""
    variance, coefficients = parts["variance"].table, parts["coefficients"].table
    designs = len(coefficients.groupby(["design", "psi"]))
    text = Path(__file__).with_name("calibration_page.md").read_text(encoding="utf-8")
    figures = len(exact_rows(variance, coefficients))
    partly = coefficients[(coefficients["exact"] > 0.0) & (coefficients["exact"] < MARKED)]
    extra = f" --audit-replicates {audit_replicates}" if "audit" in parts else ""
    values = {
        "command": f"python -m benchmarks.calibration --replicates {replicates} --processes {processes}{extra} "
        "--write docs/calibration.md",
        "replicates": f"{replicates:,}",
        "seeds": ", ".join(f"{SEEDS[name]} ({name})" for name in parts),
        "seconds": ", ".join(f"{name} {part.seconds / 60:.1f} min" for name, part in parts.items()),
        "machine": machine,
        "error": f"{100 * np.sqrt(0.05 * 0.95 / replicates):.2f}",
        "exact_figures": f"{figures}",
        "by_chance": f"{2.0 * stats.norm.sf(LIMIT) * figures:.2f}",
        "limit": f"{LIMIT}",
        "marked": f"{100 * MARKED:.0f}",
        "partly": f"{len(partly)}",
        "partly_low": f"{100 * partly['observed'].min():.1f}",
        "partly_high": f"{100 * partly['observed'].max():.1f}",
        "designs": f"{designs}",
        "variance_designs": f"{len(variance.groupby(['design', 'psi']))}",
        "verdict": verdict(variance, coefficients),
        "tests": tests_section(variance),
        "components": components_section(variance),
        "summary": summary_section(coefficients),
        "details": details_section(coefficients),
        "audit": audit_section(parts["audit"].table) if "audit" in parts else "",
    }
    for name, value in values.items():
        text = text.replace("{{" + name + "}}", value)
    return text.rstrip() + "\n"


def audit_section(table: pd.DataFrame) -> str:
    """Return the tests of the audit: sizes and powers, one line per test."""
    parts = ["## Tests of the audit"]
    for what, rows in table.groupby("what", sort=False):
        across = ["design"] if str(what).startswith("size") else ["alternative", "design"]
        lines = []
        for keys, group in rows.groupby(["test", *across], sort=False):
            first = group.iloc[0]
            shown = cell(first, False) if what == "size" else f"{100 * first['observed']:.1f}"
            lines.append([*(str(key) for key in keys), shown, f"{100 * first['error']:.2f}"])
        parts += [f"### {str(what).capitalize()}", markdown(["test", *across, "rejected, %", "error"], lines)]
    return "\n\n".join(parts)


def main() -> int:
    """Run from the command line."""
    parser = argparse.ArgumentParser(prog="python -m benchmarks.calibration", description=__doc__)
    parser.add_argument("--replicates", type=int, default=4_000, help="per design")
    parser.add_argument("--processes", type=int, default=2, help="changes the time, not the figures")
    parser.add_argument("--audit-replicates", type=int, default=0, help="per design of the audit; 0: without")
    parser.add_argument("--tables", type=Path, metavar="DIR", help="keep tables here and take those that fit")
    parser.add_argument("--write", type=Path, metavar="FILE", help="write the page of the documentation")
    given = parser.parse_args()
    from benchmarks.page import machine  # noqa: PLC0415  (reads settings of the environment)

    makers: dict[str, tuple[Callable[[], pd.DataFrame], int]] = {
        "variance": (partial(calibration_variance.calibrate, replicates=given.replicates), given.replicates),
        "coefficients": (
            partial(
                calibration_coefficients.calibrate, replicates=given.replicates, processes=given.processes
            ),
            given.replicates,
        ),
    }
    if given.audit_replicates and importlib.util.find_spec(AUDIT) is not None:
        audit = importlib.import_module(AUDIT)
        makers["audit"] = (
            partial(audit.calibrate, replicates=given.audit_replicates),
            given.audit_replicates,
        )
    parts = {name: run(name, make, count, given.tables) for name, (make, count) in makers.items()}
    variance, coefficients = parts["variance"].table, parts["coefficients"].table
    print(verdict(variance, coefficients))
    if given.write is not None:
        threads = os.environ.get("OMP_NUM_THREADS", "default")
        text = page(parts, given.replicates, given.processes, machine(threads), given.audit_replicates)
        more = calibration_projection.kept(given.write)  # that section has a command of its own
        given.write.write_text(text + (f"\n{more}" if more else ""), encoding="utf-8")
    return 0 if passes(variance, coefficients) else 1


if __name__ == "__main__":
    raise SystemExit(main())
