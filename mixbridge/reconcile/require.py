"""Require that routes agree, and explain where they do not; no route is left out unseen."""

from __future__ import annotations

from collections.abc import Callable
from typing import Literal

import pandas as pd

from mixbridge.errors import DisagreementError, OptionError
from mixbridge.reconcile.agreement import CLASSES, Thresholds
from mixbridge.routes import LEDGER_ROUTES, REFERENCE_ROUTES

__all__ = ["REQUIRABLE", "require"]

REQUIRABLE = CLASSES[:3]
"""What can be required, strictest first; it allows its own class and all milder ones."""
LEFT_OUT = "left out"
MEANING = {
    "identical": "equal to rounding",
    "visible": "no change of what the interval says about zero",
}


def require(
    table: pd.DataFrame,
    term: str,
    agree: Literal["identical", "immaterial", "visible"] = "immaterial",
    *,
    thresholds: Thresholds | None = None,
    explain: Callable[[str], str] | None = None,
) -> pd.DataFrame:
    """Require that every random-effects route agrees with the primary one in a term.

    Parameters
    ----------
    table : DataFrame
        A ledger, as `mixbridge.reconcile.ledger` returns it.
    term : str
    agree : {"identical", "immaterial", "visible"}
        Worst class allowed. ``visible`` only refuses ``conflicting`` gaps, those that change what the interval says
        about zero.
    thresholds : Thresholds, optional
        Those that the verdicts of the table were made with; printed.
    explain : callable, optional
        Returns, for a route, where its gap comes from; used for the route with the widest gap.

    Returns
    -------
    DataFrame
        The rows of the ledger that were compared, and below them those that could not be and the routes of the
        standard ledger that the table leaves out, with columns ``compared`` and ``agrees`` (which is missing for a
        row not compared).

    Raises
    ------
    OptionError
        If the term or the class is not known.
    DisagreementError
        If a route disagrees, or there is none to compare with. The message lists every route.
    """
    if agree not in REQUIRABLE:
        raise OptionError.not_among("agree", agree, REQUIRABLE)
    terms = list(dict.fromkeys(table["term"]))
    if term not in terms:
        raise OptionError.not_among("term", term, terms)
    lines = table[table["term"] == term]
    found = _judged(lines, agree)
    primary = str(lines.loc[lines["verdict"] == "primary", "route"].iloc[0])
    compared = found[found["compared"]]
    bad = compared[compared["agrees"] == False]  # noqa: E712
    if len(compared) and not len(bad):
        return found
    raise DisagreementError(
        _message(found, term, agree, primary=primary, thresholds=thresholds or Thresholds(), explain=explain)
    )


def _judged(lines: pd.DataFrame, agree: str) -> pd.DataFrame:
    votes = lines[~lines["route"].isin(REFERENCE_ROUTES) & (lines["verdict"] != "primary")]
    allowed = CLASSES[: CLASSES.index(agree) + 1]
    judged = votes.assign(compared=votes["verdict"].isin(CLASSES), agrees=votes["verdict"].isin(allowed))
    absent = [key for key in LEDGER_ROUTES if key not in REFERENCE_ROUTES and key not in set(lines["route"])]
    extra = pd.DataFrame(
        {
            "term": lines["term"].iloc[0],
            "route": absent,
            "verdict": LEFT_OUT,
            "reason": "not in the table by choice of routes",
            "compared": False,
        },
        index=range(len(absent)),
    )
    rows = [*judged.to_dict("records"), *extra.to_dict("records")]
    found = pd.DataFrame(rows, columns=[*votes.columns, "compared", "agrees"])
    found["compared"] = found["compared"].astype(bool)
    found["agrees"] = found["agrees"].astype("boolean").where(found["compared"])
    return found.sort_values("compared", ascending=False, kind="stable", ignore_index=True)


def _message(
    found: pd.DataFrame,
    term: str,
    agree: str,
    *,
    primary: str,
    thresholds: Thresholds,
    explain: Callable[[str], str] | None,
) -> str:
    compared = found[found["compared"]]
    bad = compared[~compared["agrees"].astype(bool)]
    meaning = MEANING.get(agree, thresholds.text())
    asked = f"{term}: routes are required to be {agree} ({meaning}) to {primary}"
    if not len(compared):
        head = f"{asked}, but there is no route to compare it with."
    else:
        head = f"{asked}; {len(bad)} of {len(compared)} are not."
    body = [_line(row) for _, row in bad.iterrows()]
    good = compared[compared["agrees"].astype(bool)]
    if len(good):
        body.append("agree: " + ", ".join(f"{row['route']} ({row['verdict']})" for _, row in good.iterrows()))
    rest = found[~found["compared"]]
    if len(rest):
        body.append(
            "not compared: " + ", ".join(f"{row['route']} ({row['reason']})" for _, row in rest.iterrows())
        )
    body.append(
        f"not asked, for they answer other questions: {', '.join(REFERENCE_ROUTES)}",
    )
    if explain is not None and len(bad):
        worst = str(bad["route"].iloc[int(bad["gap_in_se"].abs().to_numpy().argmax())])
        body.append(f"{worst}: {explain(worst)}")
    return "\n  ".join([head, *body])


def _line(row: pd.Series) -> str:
    figures = f"{row['estimate']:.6g} ({row['lower']:.6g} to {row['upper']:.6g})"
    return f"{row['route']}: {row['verdict']}, {figures}; {row['reason']}"
