"""The bibliography of a study: exactly the works that its appendix names, as BibTeX and CSL-JSON."""

from __future__ import annotations

import json
from collections.abc import Mapping
from typing import Any, Literal

from mixbridge.errors import OptionError
from mixbridge.report.appendix import compose
from mixbridge.report.document_text import texts_of
from mixbridge.report.works import Work, named_in, works

__all__ = ["bibliography", "cited", "study_references"]

_KINDS = {
    "article": ("article", "journal", "article-journal", "container-title"),
    "book": ("book", "publisher", "book", "publisher"),
    "report": ("techreport", "institution", "report", "publisher"),
}
"""Kind of a work -> entry and field in BibTeX, type and field in CSL."""


def cited(study: Any) -> tuple[str, ...]:
    """Return the keys of the works that the full appendix of a study names.

    Parameters
    ----------
    study : Study, or mapping
        A study, or its record (what `Study.to_dict` returns).

    Returns
    -------
    tuple of str
        In the order of authors and years.
    """
    record = study if isinstance(study, Mapping) else study.to_dict()
    return named_in(texts_of(compose(record)))


def study_references(study: Any, form: Literal["bibtex", "csl"] = "bibtex") -> str:
    """Return the bibliography of a study.

    Parameters
    ----------
    study : Study
    form : {"bibtex", "csl"}

    Returns
    -------
    str
    """
    return bibliography(cited(study), form)


def bibliography(keys: tuple[str, ...], form: str) -> str:
    """Return works as BibTeX or as CSL in JSON.

    Parameters
    ----------
    keys : tuple of str
    form : {"bibtex", "csl"}

    Returns
    -------
    str
        Both forms say that the details of the works are from memory.
    """
    if form == "bibtex":
        entries = [_bibtex(key, works()[key]) for key in keys]
        return (
            "\n\n".join([*entries, "% Details of these works are from memory: check them before printing."])
            + "\n"
        )
    if form == "csl":
        return json.dumps([_csl(key, works()[key]) for key in keys], indent=1, ensure_ascii=False) + "\n"
    raise OptionError.not_among("form", form, ("bibtex", "csl"))


def _bibtex(key: str, work: Work) -> str:
    entry, container, _, _ = _KINDS[work.kind]
    fields = {
        "author": " and ".join(f"{family}, {given}" for family, given in work.authors),
        "year": str(work.year),
        "title": "{" + work.title.replace("&", r"\&") + "}",
        container: work.container.replace("&", r"\&"),
        "volume": work.volume,
        "pages": work.pages.replace("-", "--"),
    }
    body = ",\n".join(f"  {name} = {{{value}}}" for name, value in fields.items() if value)
    return f"@{entry}{{{key},\n{body}\n}}"


def _csl(key: str, work: Work) -> dict[str, Any]:
    _, _, kind, container = _KINDS[work.kind]
    found: dict[str, Any] = {
        "id": key,
        "type": kind,
        "author": [{"family": family, "given": given} for family, given in work.authors],
        "issued": {"date-parts": [[work.year]]},
        "title": work.title,
        container: work.container,
        "note": f"details {work.provenance}",
    }
    if work.volume:
        found["volume"] = work.volume
    if work.pages:
        found["page"] = work.pages
    return found
