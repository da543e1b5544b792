"""What the analysis cannot show, how to run it again, and the works whose methods it uses."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from mixbridge.report.bibliography import WORKS, cited
from mixbridge.report.document import Block, Bullets, Code, Heading, Paragraph
from mixbridge.report.obligatory import sentences_for
from mixbridge.report.words import Words

__all__ = ["limits_section", "references_section", "rerun_script", "software_section"]

Record = Mapping[str, Any]


def limits_section(record: Record) -> tuple[Block, ...]:
    """Return the obligatory sentences, the same at every length and for every audience."""
    return (Heading("What this analysis cannot show"), Bullets(sentences_for(record)))


def software_section(record: Record, words: Words) -> tuple[Block, ...]:
    """Return versions, fingerprint and the lines that run it again."""
    versions = ", ".join(f"{name} {number}" for name, number in record["software"].items())
    found = record["variance_tests"]
    seed = f" Simulated null laws: seed {found['seed']}." if found["status"] == "computed" else ""
    return (
        Heading("Software, and how to run it again"),
        Paragraph(
            f"{versions}.{seed} Fingerprint of the data (SHA-256 of their closed moments): "
            f"{record['fingerprint']}."
        ),
        Code(rerun_script(record)),
        Paragraph(
            "The record of this study (study.to_dict(), or mixbridge check --json) carries the moments, and "
            "mixbridge verify recomputes every figure in it without the rows."
        ),
    )


def rerun_script(record: Record) -> str:
    """Return lines of Python that make the study again from a frame called data."""
    options = [f"unit={record['unit']!r}"]
    if record["period"] is not None:
        options.append(f"period={record['period']!r}")
    if record["primary"] != "reml":
        options.append(f"primary={record['primary']!r}")
    if record["confidence"] != 0.95:
        options.append(f"confidence={record['confidence']!r}")
    call = f"study = mixbridge.crosscheck({record['formula']!r}, data, {', '.join(options)})"
    added = record["added"]
    then = "" if added is None else f"\nstudy = study.correlated({added['form']!r})"
    return f"import mixbridge\n\n{call}{then}\nprint(study)"


def references_section(record: Record) -> tuple[Block, ...]:
    """Return the works whose methods were used."""
    return (Heading("References"), Bullets(tuple(WORKS[key].line for key in cited(record))))
