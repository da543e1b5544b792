"""The first screen of a study: at most 40 lines of at most 100 columns, nothing cut silently."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Protocol

import numpy as np
import pandas as pd

from mixbridge.display.text import WIDTH, columns, interval, number, shorten, signed
from mixbridge.errors import IdentificationError, OptionError
from mixbridge.moments import Moments
from mixbridge.panel import Panel
from mixbridge.ratio import Curve
from mixbridge.reconcile.agreement import CLASSES, Thresholds
from mixbridge.reconcile.attribution import Attribution
from mixbridge.reconcile.identities import Identity
from mixbridge.routes import REFERENCE_ROUTES, Fit

__all__ = ["StudyView", "study_screen"]

LINES = 40
"""Most lines of the first screen."""


class StudyView(Protocol):
    """What the screen and the record need to know of a study."""

    @property
    def panel(self) -> Panel: ...  # noqa: D102
    @property
    def moments(self) -> Moments: ...  # noqa: D102
    @property
    def curve(self) -> Curve: ...  # noqa: D102
    @property
    def primary(self) -> str: ...  # noqa: D102
    @property
    def confidence(self) -> float: ...  # noqa: D102
    @property
    def reference(self) -> str: ...  # noqa: D102
    @property
    def fits(self) -> Mapping[str, Fit]: ...  # noqa: D102
    @property
    def ledger(self) -> pd.DataFrame: ...  # noqa: D102
    @property
    def components(self) -> pd.DataFrame: ...  # noqa: D102
    @property
    def columns_report(self) -> pd.DataFrame: ...  # noqa: D102
    @property
    def identity_results(self) -> tuple[Identity, ...]: ...  # noqa: D102
    @property
    def singletons(self) -> int: ...  # noqa: D102
    def attribution(self, term: str, a: str) -> Attribution: ...  # noqa: D102


def study_screen(study: StudyView) -> str:
    """Return the first screen of a study.

    Parameters
    ----------
    study : StudyView

    Returns
    -------
    str
        At most 40 lines of at most 100 columns; terms that find no room are counted, never cut silently.
    """
    head, components, foot = _rows_used(study), _components(study), _cautions(study)
    terms = len(study.curve.names)
    for shown in range(terms, 0, -1):
        agreement = _agreement(study, shown)
        if len(head) + len(agreement) + len(components) + len(foot) + 2 <= LINES:
            break
    return "\n".join([*head, "", *agreement, "", *components, *foot])


def _rows_used(study: StudyView) -> list[str]:
    panel, moments, fit = study.panel, study.moments, study.fits[study.primary]
    account = panel.accounting
    sizes = moments.sizes
    rows = f"{account.rows_used} of {account.rows_given} used"
    if account.rows_dropped:
        causes = [
            f"{rows_} {cause}" if cause.endswith(column) else f"{rows_} {cause} ({column})"
            for cause, column, rows_ in account.dropped
        ]
        rows += f"; dropped: {_join(causes, WIDTH - 24 - len(rows))}"
    else:
        rows += ", none dropped"
    one = f", {study.singletons} with one row" if study.singletons else ""
    each = (
        f"{sizes[0]} rows each"
        if sizes[0] == sizes[-1]
        else f"{sizes[0]} to {sizes[-1]} rows each, median {_median(sizes, moments.counts):g}"
    )
    units = f"{panel.N} ({shorten(panel.unit_name, 30)}), {each}{one}"
    table = study.columns_report
    kinds = {
        level: [str(name) for name in table.loc[table["level"] == level, "column"] if name != panel.outcome]
        for level in ("both", "within", "between")
    }
    words = {"both": "vary both ways", "within": "within units only", "between": "constant within units"}
    known = [(level, names) for level, names in kinds.items() if names]
    levels = "a constant only"
    for width in range(90, 8, -2):
        if known:
            levels = "; ".join(f"{words[level]}: {_join(names, width)}" for level, names in known)
        if len(levels) <= WIDTH - 12:
            break
    else:
        levels = ", ".join(f"{len(names)} {words[level]}" for level, names in known)
    lines = [
        shorten(f"Cross-check of {panel.formula}, one random intercept per {panel.unit_name}", WIDTH),
        *([shorten(f"  source    {panel.source_note}", WIDTH)] if panel.source_note else []),
        f"  rows      {rows}",
        f"  units     {units}",
        f"  columns   {levels}",
    ]
    if fit.estimated and np.isfinite(fit.ratio):
        weights = fit.quasi_demeaning
        span = (
            number(weights.iloc[0], 3)
            if len(weights) == 1
            else interval(weights.iloc[0], weights.iloc[-1], 3)
        )
        lines.append(
            f"  primary   {study.primary} ({fit.status}): ratio ψ {number(fit.ratio)}, "
            f"ICC {number(fit.icc, 3)}, quasi-demeaning λ {span}"
        )
        if fit.certificate is not None and fit.certificate.excluded:
            more = len(fit.certificate.stationary) > 1
            others = f"; {len(fit.certificate.stationary)} stationary points" if more else ""
            bounded = f"no ratio is better by {fit.certificate.epsilon:.0e} in deviance"
            lines.append(f"  optimum   bounded: {bounded}{others}")
        elif fit.certificate is not None:
            lines.append(
                "  optimum   NOT bounded: a better ratio could not be excluded, "
                "see the certificate of the fit"
            )
    else:
        lines.append(f"  primary   {study.primary}: {fit.status}")
    if study.curve.near_dependency:
        digits = int(np.log10(study.curve.condition))
        text = f"columns are nearly collinear, {study.curve.near_dependency}: about {digits} of 16 digits are lost"
        lines.append(shorten(f"  note      {text}", WIDTH))
    lines += [shorten(f"  note      {note}", WIDTH) for note in account.notes[:2]]
    if len(account.notes) > 2:
        lines.append(f"  note      {len(account.notes) - 2} more in study.panel.accounting")
    return lines


def _agreement(study: StudyView, most: int) -> list[str]:
    """Return the two tables of agreement, of at most `most` terms.

    Random-effects routes are counted by class of their gaps; other routes are shown with their gaps.
    """
    table, primary = study.ledger, study.primary
    votes = [key for key in study.fits if key not in REFERENCE_ROUTES and key != primary]
    thresholds = Thresholds()
    lines = [
        f"Do {len(votes)} other random-effects routes agree with {primary}? "
        f"Immaterial: gap below {thresholds.gap:g} standard",
        f"errors (se) of {primary} and half-widths within {thresholds.width:.0%}. "
        f"{study.confidence:.0%} intervals: {study.reference}.",
    ]
    beside = [key for key in REFERENCE_ROUTES if key in study.fits and key != primary]
    terms = [str(term) for term in dict.fromkeys(table["term"])]
    grouped: dict[str, pd.DataFrame] = {str(term): part for term, part in table.groupby("term", sort=False)}
    order = sorted(terms, key=lambda term: -_weight(grouped[term], votes))
    shown = [term for term in terms if term in order[:most]]
    rows = [["term", primary, "se", "other routes", "widest gap (se)"]]
    for term in shown:
        part = grouped[term].set_index("route")
        base = _row(part, primary)
        there = [key for key in votes if key in part.index]
        gaps = part.loc[there, "gap_in_se"].dropna()
        far = str(gaps.abs().idxmax()) if len(gaps) else ""
        widest = f"{signed(float(gaps[far]))} {far}" if far else "-"
        if far and abs(float(gaps[far])) <= Thresholds().rounding:
            widest = "0, to rounding"
        counts = part.loc[there, "verdict"].value_counts()
        classes = (
            ", ".join(f"{counts[name]} {name}" for name in CLASSES if name in counts) or "none available"
        )
        error = number(base["standard_error"], 3)
        rows.append([term, number(base["estimate"]), error, classes, shorten(widest, 24)])
    lines += _fitted(rows, right=(1, 2))
    lines += [
        line for term in _weighty(grouped, order, votes) for line in _cause(study, term, grouped[term], votes)
    ]
    if beside:
        lines.append(f"Other questions on the same rows: estimate, and (gap in se of {primary})")
        rows = [["term", *(key.replace("_", " ") for key in beside)]]
        for term in shown:
            part = grouped[term].set_index("route")
            rows.append([term, *(_beside(_row(part, key)) for key in beside)])
        lines += _fitted(rows, right=range(1, 1 + len(beside)))
    if len(shown) < len(terms):
        worst = [_worst(grouped[term], votes) for term in terms if term not in shown]
        summary = ", ".join(
            f"{worst.count(name)} {name}" for name in (*CLASSES, "not available") if name in worst
        )
        lines.append(f"  and {len(worst)} more terms, by their worst class {summary}: study.ledger shows all")
    return lines


def _weighty(grouped: Mapping[str, pd.DataFrame], order: list[str], votes: list[str]) -> list[str]:
    """Return at most two terms whose gaps between random-effects routes are neither identical nor immaterial."""
    gaps = {
        term: float(part.loc[part["route"].isin(votes), "gap_in_se"].abs().max())
        for term, part in grouped.items()
    }
    loud = [
        term
        for term in order
        if _worst(grouped[term], votes) in CLASSES[2:] and gaps[term] >= Thresholds().gap
    ]
    return sorted(loud, key=lambda term: -gaps[term])[:2]


def _cause(study: StudyView, term: str, part: pd.DataFrame, votes: list[str]) -> list[str]:
    """Say which named changes make the widest gap of a term, in standard errors of the primary route."""
    rows = part[part["route"].isin(votes)].set_index("route")["gap_in_se"].dropna()
    key = str(rows.abs().idxmax())
    try:
        causes = study.attribution(term, key).causes
    except (IdentificationError, OptionError):
        return []
    parts = [
        f"{signed(row['in_se'])} {row['cause']}" for _, row in causes.iterrows() if abs(row["in_se"]) >= 0.05
    ]
    if not parts:
        return []
    return [shorten(f"  why: {term}, {key} {signed(rows[key])} se = {_join(parts, 80)}", WIDTH)]


def _fitted(rows: list[list[str]], right: Sequence[int]) -> list[str]:
    """Lay out rows with as much of the first column as the width of the screen allows."""
    widths = [max(len(row[j]) for row in rows) for j in range(1, len(rows[0]))]
    room = max(WIDTH - 2 - sum(widths) - 2 * len(widths), 8)
    return columns([[shorten(row[0], room), *row[1:]] for row in rows], right=right)


def _row(part: pd.DataFrame, route: str) -> pd.Series:
    """Return the line of a route from the ledger of one term, which `route` indexes."""
    return part.loc[[route]].iloc[0]


def _beside(row: pd.Series) -> str:
    if np.isnan(row["estimate"]):
        return "-"
    size = row["gap_in_se"]
    gap = "" if np.isnan(size) else f" ({signed(size) if abs(size) > Thresholds().rounding else '0'})"
    return f"{number(row['estimate'])}{gap}"


def _weight(part: pd.DataFrame, votes: list[str]) -> float:
    """Order terms by the worst class, then by the widest gap, other routes included."""
    gaps = part["gap_in_se"].abs().max()
    worst = _worst(part, votes)
    place = CLASSES.index(worst) if worst in CLASSES else -1
    return 1e6 * place + (0.0 if np.isnan(gaps) else min(float(gaps), 1e5))


def _worst(part: pd.DataFrame, votes: list[str]) -> str:
    verdicts = set(part.loc[part["route"].isin(votes), "verdict"])
    return next((name for name in reversed(CLASSES) if name in verdicts), "not available")


def _components(study: StudyView) -> list[str]:
    """Return the components by route; routes with the same figures share a line."""
    table = study.components
    merged: dict[tuple[str, ...], list[str]] = {}
    for _, row in table.iterrows():
        if row["route"] in REFERENCE_ROUTES:
            continue
        cells = (
            *(number(row[name]) for name in ("unit_variance", "idiosyncratic_variance", "ratio")),
            number(row["icc"], 3),
        )
        errors = tuple(number(row[f"{name}_se"], 2) for name in ("unit_variance", "idiosyncratic_variance"))
        status = "zero used" if row["unit_variance"] < 0 else str(row["status"])
        merged.setdefault((*cells, *errors, status), []).append(str(row["route"]))
    rows = [["route", "unit", "(se)", "idiosyncratic", "(se)", "ratio ψ", "ICC", "status"]]
    without: list[str] = []
    for key, names in merged.items():
        cells, status = key[:-1], key[-1]
        if set(cells) == {"-"}:
            without.append(shorten(f"  {_join(names, 44)}: {status}", WIDTH))
            continue
        unit, idiosyncratic, ratio, icc, unit_se, idiosyncratic_se = cells
        rows.append(
            [_join(names, 34, " = "), unit, unit_se, idiosyncratic, idiosyncratic_se, ratio, icc, status]
        )
    room = WIDTH - 2 - sum(max(len(row[j]) for row in rows) + 2 for j in range(7))
    rows = [[*row[:-1], shorten(row[-1], max(room, 12))] for row in rows]
    return [
        "Variance components (variances; sampling errors under normality)",
        *(_fitted(rows, right=range(1, 7)) if len(rows) > 1 else []),
        *without,
    ]


def _cautions(study: StudyView) -> list[str]:
    results = study.identity_results
    counts = {verdict: sum(item.verdict == verdict for item in results) for verdict in ("holds", "FAILS")}
    text = f"Identities, which check the arithmetic and not the model: {counts['holds']} hold"
    if counts["FAILS"]:
        failed = [item.key for item in results if item.verdict == "FAILS"]
        text += f", {counts['FAILS']} FAIL ({_join(failed, 30)})"
    return [
        text + ".",
        "All routes share one covariance model and agree together when it is wrong; agreement is no",
        "evidence that unit effects are unrelated to the covariates. Compare within and between above.",
    ]


def _join(names: list[Any], width: int, by: str = ", ") -> str:
    """Join names until a width is reached, then say how many more there are."""
    text = ""
    for at, name in enumerate(names):
        longer = f"{text}{by if text else ''}{name}"
        more = f" and {len(names) - at} more"
        if len(longer) + (len(more) if at + 1 < len(names) else 0) > width and text:
            return text + more
        text = longer
    return text


def _median(sizes: np.ndarray[Any, Any], counts: np.ndarray[Any, Any]) -> float:
    """Return the median of sizes that occur so many times."""
    upto = np.cumsum(counts)
    total = int(upto[-1])
    middle = np.searchsorted(upto, [(total + 1) // 2, total // 2 + 1])
    return float(sizes[middle].mean())
