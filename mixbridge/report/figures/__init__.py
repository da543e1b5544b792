"""Figures of a study. Each returns its Axes, has an alternative in words, and can be had as SVG."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from typing import TYPE_CHECKING, Any

from mixbridge.errors import OptionError
from mixbridge.report.figures.attribution import attribution_in_words, draw_attribution
from mixbridge.report.figures.effects import draw_effects, effects_in_words
from mixbridge.report.figures.efficiency import draw_efficiency, efficiency_in_words
from mixbridge.report.figures.influence import draw_influence, influence_in_words
from mixbridge.report.figures.ledger import draw_ledger, ledger_in_words
from mixbridge.report.figures.look import settle, styled, svg_of
from mixbridge.report.figures.path import draw_path, path_in_words
from mixbridge.report.figures.scatter import draw_scatter, scatter_in_words
from mixbridge.report.figures.unit_weights import draw_weights, weights_in_words

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = ["FIGURES", "alternative", "draw", "svg"]

_DRAWN: Mapping[str, tuple[Callable[..., Any], Callable[..., str]]] = {
    "ledger": (draw_ledger, ledger_in_words),
    "path": (draw_path, path_in_words),
    "attribution": (draw_attribution, attribution_in_words),
    "within_between": (draw_scatter, scatter_in_words),
    "effects": (draw_effects, effects_in_words),
    "weights": (draw_weights, weights_in_words),
    "efficiency": (draw_efficiency, efficiency_in_words),
    "leave_one_out": (draw_influence, influence_in_words),
}

FIGURES: Mapping[str, str] = {
    "ledger": "Estimate and interval of one term by every route.",
    "path": "One coefficient from pooled to within, with every route's place and the profile deviance.",
    "attribution": "The gap between two routes, split into its causes.",
    "within_between": "Deviations from unit means and unit means, each with its slope.",
    "effects": "Predicted unit effects with prediction intervals.",
    "weights": "How much more a large unit counts than a small one, by route.",
    "efficiency": "Efficiency of the variance components by route.",
    "leave_one_out": "Change of one coefficient without each unit.",
}
"""Every figure, with a caption."""


def draw(study: Any, name: str, *, ax: Axes | None = None, **options: object) -> Axes:
    """Draw a figure.

    Parameters
    ----------
    study : Study
    name : str
        A key of `FIGURES`.
    ax : matplotlib Axes, optional
        Where to draw; a figure of its own unless given. Figures with several panels draw the first one there.
    **options
        ``term``; ``a`` and ``b`` for ``attribution``; ``route`` for ``effects``; ``names`` (False hides units)
        and
        ``most`` for ``effects`` and ``leave_one_out``.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    OptionError
        If there is no such figure or option, nothing to draw, or no matplotlib.
    """
    make = _of(name)[0]
    with styled():
        axes: Axes = _called(make, name, study, ax, **options)
        figure = axes.get_figure(root=True)
        if ax is None and figure is not None:
            settle(figure)
    return axes


def alternative(study: Any, name: str, **options: object) -> str:
    """Return the text alternative of a figure, from the numbers it shows."""
    text: str = _called(_of(name)[1], name, study, **options)
    return text


def svg(study: Any, name: str, **options: object) -> str:
    """Return a figure as SVG: the same bytes for the same study, text kept as text."""
    axes = draw(study, name, ax=None, **options)
    with styled():
        return svg_of(axes)


def _of(name: str) -> tuple[Callable[..., Any], Callable[..., str]]:
    if name not in _DRAWN:
        raise OptionError.not_among("figure", name, tuple(_DRAWN))
    return _DRAWN[name]


def _called(make: Callable[..., Any], name: str, *given: object, **options: object) -> Any:
    allowed = make.__kwdefaults__ or {}
    for key in options:
        if key not in allowed:
            raise OptionError(
                f"figure {name!r} has no option {key!r}; it has: {', '.join(allowed) or 'none'}."
            )
    return make(*given, **options)
