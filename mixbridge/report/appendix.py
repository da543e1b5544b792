"""The methods appendix: composed from the record of a study, rendered in the format that the file name asks for.

What it holds follows published guidance on reporting such models (named here from memory): Jackson 2010 on multilevel
models, Meteyard & Davies 2020 on mixed-effects models, and the STROBE statement on observational studies.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from importlib.util import find_spec
from pathlib import Path
from typing import Any

from mixbridge.errors import DataError, MixbridgeError, OptionError
from mixbridge.report import sections
from mixbridge.report.as_html import html
from mixbridge.report.as_latex import latex
from mixbridge.report.as_markdown import markdown
from mixbridge.report.document import Block, Document, Heading, Paragraph, Picture
from mixbridge.report.paragraph import paragraph_of
from mixbridge.report.words import Words, words_for

__all__ = ["LENGTHS", "compose", "write_appendix"]

Record = Mapping[str, Any]
LENGTHS = ("paragraph", "page", "full")
SUFFIXES = (".md", ".tex", ".html")
PICTURES = ("ledger", "path", "within_between", "weights", "efficiency", "leave_one_out")
"""Figures in a page, where they can be drawn."""


def write_appendix(
    study: Any,
    path: Path,
    *,
    audience: str = "both",
    length: str = "full",
    title: str = "Methods appendix",
    chosen_beforehand: bool | None = None,
) -> Path:
    """Write the appendix of a study.

    Parameters
    ----------
    study : Study
    path : Path
        Ends in ``.md``, ``.tex`` or ``.html``.
    audience, length, title, chosen_beforehand
        As for `Study.appendix`.

    Returns
    -------
    Path

    Raises
    ------
    OptionError, DataError
        If an option is not known, or the file cannot be written.
    """
    suffix = path.suffix.lower()
    if suffix not in SUFFIXES:
        raise OptionError(
            f"{path.name!r} does not end in one of {', '.join(SUFFIXES)}: the ending chooses the format."
        )
    record = study.to_dict()
    pictures = _pictures(study) if suffix == ".html" and length == "full" else ()
    document = compose(
        record,
        audience=audience,
        length=length,
        title=title,
        chosen_beforehand=chosen_beforehand,
        pictures=pictures,
    )
    if suffix == ".html":
        kept = {"record.json": json.dumps(record, indent=1, ensure_ascii=False)} if length == "full" else {}
        text = html(document, attachments=kept)
    else:
        text = latex(document) if suffix == ".tex" else markdown(document)
    try:
        path.write_text(text, encoding="utf-8", newline="\n")
    except OSError as error:
        raise DataError(f"{path} cannot be written: {error.strerror}.") from error
    return path


def compose(
    record: Record,
    *,
    audience: str = "both",
    length: str = "full",
    title: str = "Methods appendix",
    chosen_beforehand: bool | None = None,
    pictures: tuple[Picture, ...] = (),
) -> Document:
    """Compose the appendix from a record alone.

    Parameters
    ----------
    record : mapping
        What `Study.to_dict` returns.
    audience, length, title, chosen_beforehand
        As for `Study.appendix`.
    pictures : tuple of Picture

    Returns
    -------
    Document
    """
    if length not in LENGTHS:
        raise OptionError.not_among("length", length, LENGTHS)
    if chosen_beforehand not in (None, True, False):
        raise OptionError.not_among("chosen_beforehand", chosen_beforehand, (None, True, False))
    words = words_for(audience)
    blocks: list[Block] = [Paragraph(paragraph_of(record, words))]
    if length == "paragraph":
        blocks.append(Paragraph(sections.chosen_text(record, chosen_beforehand)))
    elif length == "page":
        blocks += _page(record, words, chosen_beforehand)
    else:
        blocks += _full(record, words, chosen_beforehand, pictures)
    blocks += sections.limits_section(record)
    if length != "paragraph":
        blocks += sections.software_section(record)
    blocks += sections.references_section(blocks)
    return Document(title, tuple(blocks))


def _page(record: Record, words: Words, chosen_beforehand: bool | None) -> list[Block]:
    return [
        *sections.model_text(record, words),
        Heading("Rows and units"),
        Paragraph(sections.rows_text(record)),
        *sections.estimator_text(record, words, chosen_beforehand),
        *sections.coefficient_text(record, words),
        *sections.component_text(record, words),
    ]


def _full(
    record: Record, words: Words, chosen_beforehand: bool | None, pictures: tuple[Picture, ...]
) -> list[Block]:
    return [
        *sections.model_section(record, words),
        *sections.vocabulary_section(),
        *sections.data_section(record, words),
        *sections.estimator_section(record, words, chosen_beforehand),
        *sections.coefficient_section(record, words),
        *sections.component_section(record, words),
        *sections.agreement_section(record, words),
        *sections.attribution_section(record, words),
        *sections.zero_section(record, words),
        *sections.exogeneity_section(record, words),
        *sections.optimum_section(record, words),
        *sections.identity_section(record, words),
        *sections.audit_section(record, words),
        *sections.sensitivity_section(record, words),
        *([Heading("Figures")] if pictures else []),
        *pictures,
    ]


def _pictures(study: Any) -> tuple[Picture, ...]:
    """Draw what can be drawn; what cannot be (no rows, no matplotlib) is left out."""
    if find_spec("matplotlib") is None or find_spec("mixbridge.report.figures") is None:
        return ()
    from mixbridge.report.figures import FIGURES, alternative, svg  # noqa: PLC0415  (matplotlib is an extra)

    found = []
    for name in PICTURES:
        if name not in FIGURES:
            continue
        try:
            options = {"names": False} if name == "leave_one_out" else {}  # an appendix names no unit
            found.append(
                Picture(name, svg(study, name, **options), alternative(study, name, **options), FIGURES[name])
            )
        except MixbridgeError:  # the sections say why these figures are not there
            continue
    return tuple(found)
