"""Results as text: the page ``docs/performance.md`` and the output of the command."""

from __future__ import annotations

import os
import platform
from collections.abc import Mapping
from importlib.metadata import version

from benchmarks.registry import PROBLEMS
from benchmarks.results import Agreement, Ratio, Result, Table

PACKAGES = ("numpy", "scipy", "pandas", "statsmodels")


def machine(threads: str) -> str:
    """Describe the machine in general terms."""
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count()
    packages = ", ".join(f"{name} {version(name)}" for name in PACKAGES)
    count = "1 thread" if threads == "1" else f"{threads} threads"
    return (
        f"{platform.machine()} with {cores} cores, {platform.system()}, Python {platform.python_version()}, "
        f"{packages}; {count} for linear algebra, the same for every task."
    )


def load() -> str:
    """Return the load average of the last minute as text, where the system reports it."""
    return f"{os.getloadavg()[0]:.1f}" if hasattr(os, "getloadavg") else "not reported"


def page(results: Mapping[str, Result], profile: str, threads: str, loads: tuple[str, str]) -> str:
    """Return the documentation page; `loads` are the load averages before and after the run."""
    parts = [
        "# Speed and memory",
        f"Written by `python -m benchmarks --profile {profile} --write docs/performance.md`. Rivals run in the same "
        "process and the same rounds as the package, so that a busy spell of the machine meets "
        "both; a ratio carries over to other machines better than a time does.",
        "Measured on: " + machine(threads),
        f"Load average of the machine {loads[0]} before the run and {loads[1]} after it, of which the run itself makes "
        "up 1. Rows in random order are looked up in tables that a program running beside would push out of the shared "
        "cache: the first ratio below is the one that suffers.",
        "## Summary",
        _markdown(_summary(results)),
    ]
    for name, result in results.items():
        parts += [f"## {PROBLEMS[name].title}", section(result, markdown=True)]
    return "\n\n".join(parts) + "\n"


def section(result: Result, markdown: bool = False) -> str:
    """Return one result as text."""
    bullet = "- "
    lines = [
        f"{result.problem}.",
        f"Timing: {result.method}." if "round" in result.method else f"{result.method}.",
    ]
    table = _markdown(result.table) if markdown else _plain(result.table)
    listed = [bullet + line(ratio) for ratio in result.ratios]
    listed += [bullet + compared(each) for each in result.agreements]
    text = ["\n".join(lines), table, "\n".join(listed)]
    text += list(result.notes)
    return "\n\n".join(text)


def line(ratio: Ratio) -> str:
    """Return a figure with its target in words."""
    value = f"{ratio.value:.3g}{' ' + ratio.unit if ratio.unit else ''}"
    if ratio.target is None:
        return f"{ratio.name}: {value}"
    verdict = "met" if ratio.met else "MISSED"
    return f"{ratio.name}: {value} (target: {ratio.sense} {ratio.target:g}; {verdict})"


def compared(agreement: Agreement) -> str:
    """Return a comparison of numbers in words."""
    verdict = "same" if agreement.holds else "NOT THE SAME"
    return (
        f"{agreement.what}: {verdict} (difference {agreement.difference:.2g}, allowed {agreement.allowed:.2g}: "
        f"{agreement.reason})"
    )


def _summary(results: Mapping[str, Result]) -> Table:
    rows = [
        (
            PROBLEMS[name].title,
            ratio.name,
            f"{ratio.value:.3g} {ratio.unit}".strip(),
            f"{ratio.sense} {ratio.target:g}",
            "met" if ratio.met else "MISSED",
        )
        for name, result in results.items()
        for ratio in result.ratios
        if ratio.target is not None
    ]
    return Table(("benchmark", "figure", "measured", "target", ""), tuple(rows))


def _markdown(table: Table) -> str:
    lines = [
        "| " + " | ".join(cell.replace("|", "\\|") for cell in row) + " |"
        for row in (table.columns, *table.rows)
    ]
    return "\n".join([lines[0], "|" + "---|" * len(table.columns), *lines[1:]])


def _plain(table: Table) -> str:
    rows = (table.columns, *table.rows)
    widths = [max(len(row[j]) for row in rows) for j in range(len(table.columns))]
    return "\n".join(
        "  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows
    )
