"""What a study writes and draws."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Literal

from mixbridge.study.auditing import StudyAudit

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["StudyReport"]


class StudyReport(StudyAudit):
    """The part of a study that is written or drawn."""

    def appendix(
        self,
        path: str | Path,
        *,
        audience: Literal["both", "economics", "biostatistics"] = "both",
        length: Literal["paragraph", "page", "full"] = "full",
        title: str = "Methods appendix",
        chosen_beforehand: bool | None = None,
    ) -> Path:
        """Write the methods appendix.

        Parameters
        ----------
        path : str or Path
            Ends in ``.md``, ``.tex`` or ``.html``.
        audience : {"both", "economics", "biostatistics"}
            Whose vocabulary; the claims are the same.
        length : {"paragraph", "page", "full"}
            How much is said around the sentences that are always there.
        title : str
            Title of the document.
        chosen_beforehand : bool, optional
            Whether the primary route was chosen before the results were seen; if None the appendix says that it is
            not stated.

        Returns
        -------
        Path
            Where it was written. The same data and versions give the same bytes. No single unit is named in it.
        """
        from mixbridge.report.appendix import write_appendix

        return write_appendix(
            self,
            Path(path),
            audience=audience,
            length=length,
            title=title,
            chosen_beforehand=chosen_beforehand,
        )

    def paragraph(self, *, audience: Literal["both", "economics", "biostatistics"] = "both") -> str:
        """Return the paragraph for the methods section of a paper, as plain text.

        Parameters
        ----------
        audience : {"both", "economics", "biostatistics"}
            Whose vocabulary.

        Returns
        -------
        str
        """
        from mixbridge.report.paragraph import methods_paragraph

        return methods_paragraph(self, audience=audience)

    def references(self, form: Literal["bibtex", "csl"] = "bibtex") -> str:
        """Return the bibliography of exactly the methods used here.

        Parameters
        ----------
        form : {"bibtex", "csl"}
            BibTeX, or CSL as JSON.

        Returns
        -------
        str
        """
        from mixbridge.report.bibliography import study_references

        return study_references(self, form)

    def figure(self, name: str, *, ax: Axes | None = None, **options: object) -> Axes:
        """Draw one figure.

        Parameters
        ----------
        name : str
            A key of `mixbridge.report.figures.FIGURES`: ``path``, ``ledger``, ``attribution``, ``within_between``,
            ``effects``, ``weights``, ``efficiency``, ``leave_one_out``.
        ax : matplotlib Axes, optional
            Where to draw; a new figure unless given.
        **options
            What the figure takes, such as ``term``.

        Returns
        -------
        matplotlib.axes.Axes
        """
        from mixbridge.report.figures import draw

        return draw(self, name, ax=ax, **options)

    def _repr_html_(self) -> str:
        """Return the first screen for a notebook."""
        from mixbridge.report.notebook import study_html

        return study_html(self)
