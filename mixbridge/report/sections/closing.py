"""What the analysis cannot show, how to run it again, and the works that the text names."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from typing import Any

from mixbridge.report.document import Block, Bullets, Code, Heading, Paragraph
from mixbridge.report.document_text import texts_of
from mixbridge.report.obligatory import sentences_for
from mixbridge.report.words import listed
from mixbridge.report.works import named_in, works
from mixbridge.routes import LEDGER_ROUTES

__all__ = ["limits_section", "references_section", "rerun_script", "software_section"]

Record = Mapping[str, Any]


def limits_section(record: Record) -> tuple[Block, ...]:
    """Return the obligatory sentences, the same at every length and for every audience."""
    return (Heading("What this analysis cannot show"), Bullets(sentences_for(record)))


def software_section(record: Record) -> tuple[Block, ...]:
    """Return versions, seeds, tolerances, fingerprint and the lines that run it again."""
    versions = ", ".join(f"{name} {number}" for name, number in record["software"].items())
    seeds = []
    if any(row["monte_carlo_error"] is not None for row in record["variance_tests"].get("rows", [])):
        seeds.append(f"{record['variance_tests']['seed']} for null laws of likelihood ratios")
    if any("draws" in row["reference"] for row in record["audit"].get("rows", {}).values()):
        seeds.append(f"{record['audit']['seed']} and the integers after it for reference laws of the audit")
    text = f"{versions}."
    if seeds:
        text += f" Seeds: {'; '.join(seeds)}."
    bounds = {
        key: fit["certificate"]["epsilon"]
        for key, fit in record["fits"].items()
        if fit["certificate"] is not None
    }
    if bounds:
        values = listed([f"{epsilon:.0e} for {key}" for key, epsilon in bounds.items()])
        text += f" Tolerances: in deviance {values}, as bounded above; of identities, as printed beside each."
    return (
        Heading("Software, and how to run it again"),
        Paragraph(text),
        Paragraph(f"Fingerprint of the data, SHA-256 of their closed moments: {record['fingerprint']}."),
        Code(rerun_script(record)),
        Paragraph(
            "With the same data and versions this gives the same record, study.to_dict(), and the same "
            "fingerprint. The "
            "record carries the moments; mixbridge verify recomputes from them every figure that needs no rows."
        ),
    )


def rerun_script(record: Record) -> str:
    """Return lines of Python that make the study again."""
    options = [f"unit={record['unit']!r}"]
    if record["period"] is not None:
        options.append(f"period={record['period']!r}")
    if record["primary"] != "reml":
        options.append(f"primary={record['primary']!r}")
    routes = list(record["fits"])
    if set(routes) != {*LEDGER_ROUTES, record["primary"]}:
        options.append(f"routes={routes!r}")
    if record["confidence"] != 0.95:
        options.append(f"confidence={record['confidence']!r}")
    if record["rows"] == "absent":
        start = [
            "import json",
            "from pathlib import Path",
            "",
            "import mixbridge",
            "",
            "# record.json: the record of this study, which carries its moments",
            'record = json.loads(Path("record.json").read_text(encoding="utf-8"))',
            'moments = mixbridge.Moments.from_record(record["moments"])',
            f"study = mixbridge.from_moments(moments, formula={record['formula']!r}, {', '.join(options)})",
        ]
    else:
        start = [
            "import mixbridge",
            "",
            "# data: the table of rows",
            f"study = mixbridge.crosscheck({record['formula']!r}, data, {', '.join(options)})",
        ]
        if record["added"] is not None:
            chosen = record["added"]["means_of"]
            given = "" if chosen is None else f", means_of={chosen!r}"
            start.append(f"study = study.correlated({record['added']['form']!r}{given})")
    return "\n".join([*start, "print(study)", 'print(study.to_dict()["fingerprint"])'])


def references_section(blocks: Iterable[Block]) -> tuple[Block, ...]:
    """Return the works that some blocks name."""
    keys = named_in(texts_of(blocks))
    if not keys:
        return ()
    return (
        Heading("References"),
        Paragraph("Details of these works are from memory."),
        Bullets(tuple(works()[key].line for key in keys)),
    )
