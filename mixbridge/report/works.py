"""Works whose methods this package uses: pure records, and how a text names them.

The records stand in ``works.csv``; its column ``provenance`` says that their details are from memory.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cache
from importlib.resources import files
from types import MappingProxyType

__all__ = ["Work", "named_in", "works"]


@dataclass(frozen=True, slots=True)
class Work:
    """One work.

    Attributes
    ----------
    authors : tuple of (str, str)
        Family and given names.
    year : int
    title : str
    container : str
        Journal or series; the publisher of a book.
    volume, pages : str
        Empty for books and reports.
    kind : str
        ``article``, ``book`` or ``report``.
    provenance : str
        Where these details come from: ``from memory`` unless somebody has looked them up.
    """

    authors: tuple[tuple[str, str], ...]
    year: int
    title: str
    container: str
    volume: str
    pages: str
    kind: str
    provenance: str

    @property
    def names(self) -> str:
        """Authors as a text names them: ``Hausman & Taylor``."""
        families = [family for family, _ in self.authors]
        return " & ".join([", ".join(families[:-1]), families[-1]] if len(families) > 1 else families)

    @property
    def mark(self) -> str:
        """How a text cites the work: ``Hausman & Taylor 1981``."""
        return f"{self.names} {self.year}"

    @property
    def line(self) -> str:
        """The work as one line of plain text."""
        names = [f"{family}, {given}" for family, given in self.authors]
        who = " & ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)
        where = self.container + (f" {self.volume}" if self.volume else "")
        pages = f", {self.pages}" if self.pages else ""
        return f"{who} ({self.year}). {self.title}. {where}{pages}."


@cache
def works() -> Mapping[str, Work]:
    """Return every work that an output may cite, by key, in the order of authors and years."""
    text = files("mixbridge.report").joinpath("works.csv").read_text(encoding="utf-8")
    found = {}
    for row in csv.DictReader(text.splitlines(), delimiter="|"):
        people = [person.split(", ", 1) for person in row["authors"].split("; ")]
        found[row["key"]] = Work(
            tuple((family, given) for family, given in people),
            int(row["year"]),
            row["title"],
            row["container"],
            row["volume"],
            row["pages"],
            row["kind"],
            row["provenance"],
        )
    return MappingProxyType(dict(sorted(found.items(), key=lambda item: (item[1].authors, item[1].year))))


def named_in(texts: Iterable[str]) -> tuple[str, ...]:
    """Return the keys of the works that some texts cite.

    Parameters
    ----------
    texts : iterable of str
        With citations such as ``Hausman & Taylor 1981``, ``Pesaran 2004, 2015`` or ``Mundlak (1978)``.

    Returns
    -------
    tuple of str
        In the order of authors and years.

    Examples
    --------
    >>> named_in(["contrasts (Hausman 1978; Hausman & Taylor 1981)", "in the form of Pesaran (2004, 2015)"])
    ('hausman_1978', 'hausman_taylor_1981', 'pesaran_2004', 'pesaran_2015')
    """
    together = "\n".join(texts)
    seen: set[tuple[str, int]] = set()
    for names in {work.names for work in works().values()}:
        for years in re.findall(rf"(?<!& )(?<!\w){re.escape(names)} \(?((?:\d{{4}}(?:, )?)+)", together):
            seen.update((names, int(year)) for year in re.findall(r"\d{4}", years))
    return tuple(key for key, work in works().items() if (work.names, work.year) in seen)
