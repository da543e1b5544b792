"""One look for all figures: sizes, colours that stay apart in grey and for colour-blind readers, safe labels."""

from __future__ import annotations

import io
from collections.abc import Iterator
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

from mixbridge.display import visible
from mixbridge.display.text import shorten
from mixbridge.errors import OptionError

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = [
    "ACCENT",
    "BAND",
    "FAINT",
    "INK",
    "OTHER",
    "below",
    "beside",
    "blank",
    "heading",
    "label",
    "rows_axis",
    "settle",
    "styled",
    "svg_of",
]

INK = "#1d2b33"
ACCENT = "#0a5a70"
OTHER = "#c4601d"
FAINT = "#9aa5ab"
BAND = "#cfe0e4"
WIDTH = 6.5
"""Inches: the text width of a page."""
LABEL = 34
"""Most characters of a name."""

_STYLE: dict[Any, Any] = {
    "font.family": "DejaVu Sans",
    "font.size": 8.5,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.right": False,
    "axes.spines.top": False,
    "axes.titlesize": 9.5,
    "axes.titleweight": "bold",
    "axes.titlelocation": "left",
    "axes.titlecolor": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "xtick.labelsize": 8,
    "ytick.labelsize": 8,
    "text.color": INK,
    "lines.linewidth": 1.4,
    "svg.fonttype": "none",
    "svg.hashsalt": "mixbridge",
    "axes.unicode_minus": True,
}


@contextmanager
def styled() -> Iterator[None]:
    """Hold the look for what is drawn inside; settings of the process are as before afterwards."""
    try:
        from matplotlib import rc_context  # noqa: PLC0415  (an extra)
    except ImportError:
        raise OptionError("figures need matplotlib: pip install 'mixbridge[plots]'.") from None
    with rc_context(_STYLE):
        yield


def blank(height: float, width: float = WIDTH) -> Figure:
    """Return an empty figure without touching the state of a plotting session."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    figure = Figure(figsize=(width, height), layout="constrained", facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def label(text: object, width: int = LABEL) -> str:
    """Return a name as a figure shows it: on one line, shortened in its middle, never read as a formula."""
    return shorten(visible(str(text)), width).replace("\\", "\\\\").replace("$", r"\$")


def heading(ax: Axes, text: str) -> None:
    """Put a title flush left; `settle` breaks it to the room there is."""
    ax.set_title(text, loc="left", pad=8)


def below(ax: Axes, text: str) -> None:
    """Put a text below the horizontal axis; `settle` breaks it to the room there is."""
    ax.set_xlabel(text)


def settle(figure: Figure) -> None:
    """Break titles and texts below axes until each is inside the page: their room is known once all is laid out."""
    from textwrap import wrap  # noqa: PLC0415

    for _ in range(4):
        figure.draw_without_rendering()
        page, changed = figure.bbox.width, False
        for ax in figure.axes:
            for text in (ax.xaxis.label, getattr(ax, "_left_title", ax.title)):
                box = text.get_window_extent()
                over = max(box.x1 - page, -box.x0) + 3.0
                if over <= 3.0 or not text.get_text():
                    continue
                both = 2.0 if text is ax.xaxis.label else 1.0  # centred texts lose on both sides
                longest = max(len(line) for line in text.get_text().split("\n"))
                room = max(12, int(longest * (box.width - both * over) / box.width))
                lines = [part for line in text.get_text().split("\n") for part in wrap(line, room)]
                text.set_text("\n".join(lines))
                changed = True
        if not changed:
            return


def beside(ax: Axes, *, columns: int = 1) -> None:
    """Put the legend right of the axes, where it hides nothing."""
    if ax.get_legend_handles_labels()[0]:
        ax.legend(loc="upper left", bbox_to_anchor=(1.01, 1.0), ncols=columns, frameon=False, fontsize=7.5)


def rows_axis(ax: Axes, names: list[str], *, marked: str | None = None) -> None:
    """Give one line to each name, the first at the top; `marked` is set in bold."""
    ax.set_yticks(range(len(names)), [label(name) for name in names])
    ax.set_ylim(len(names) - 0.4, -0.6)
    ax.tick_params(axis="y", length=0)
    ax.spines["left"].set_visible(False)
    for tick, name in zip(ax.get_yticklabels(), names, strict=True):
        if name == marked:
            tick.set_fontweight("bold")
    ax.hlines(range(len(names)), 0, 1, transform=ax.get_yaxis_transform(), color="#e7ebec", lw=0.6, zorder=0)


def svg_of(ax: Axes) -> str:
    """Return the figure of an axes as SVG, the same bytes each time."""
    target: Any = io.StringIO()
    figure = ax.get_figure(root=True)
    assert figure is not None
    figure.savefig(target, format="svg", metadata={"Date": None, "Creator": None})
    return str(target.getvalue())
