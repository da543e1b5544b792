"""Legal chains of single changes between two estimators of the variance ratio.

They are the simple paths with the fewest changes, and those with a stated number more in which every change moves
the same way in the order of `LEVELS` (toward the likelihood, or away from it), so that nothing is introduced only
to be undone.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from mixbridge.reconcile.attribution_node import Change, Node

__all__ = ["Graph", "legal_chains"]

LEVELS: Mapping[str, float] = {
    "pooled": 0,
    "within": 0,
    "swamy_arora": 0,
    "wansbeek_kapteyn": 0,
    "wallace_hussain": 0,
    "fitting_constants": 1,
    "minque": 2,
    "iterated_minque": 3,
    "reml": 4,
    "ml": 5,
}
"""Order of the core routes: residuals of one kind, the fits of both models to all rows, minimum norm, likelihood."""


@dataclass(frozen=True, slots=True)
class Graph:
    """The changes that can be used between two ends.

    Attributes
    ----------
    changes : tuple of Change
    """

    changes: tuple[Change, ...]

    def neighbours(self, node: Node) -> Iterator[tuple[Node, Change]]:
        """Yield the nodes one change away."""
        for change in self.changes:
            if change.a == node:
                yield change.b, change
            elif change.b == node:
                yield change.a, change


def legal_chains(
    graph: Graph, a: Node, b: Node, lost: frozenset[Node], *, longer: int = 1, limit: int = 24
) -> list[tuple[Node, ...]]:
    """Return the legal chains from a to b, shortest first.

    Parameters
    ----------
    graph : Graph
    a, b : Node
    lost : frozenset of Node
        Nodes that these data do not give.
    longer : int
        How many more changes than the fewest a chain in one direction may have.
    limit : int
        Most chains returned.

    Returns
    -------
    list of tuple of Node
        Empty where no chain connects the two.
    """
    distance = _distances(graph, b, lost)
    if a not in distance:
        return []
    fewest = distance[a]
    found: list[tuple[Node, ...]] = []

    def walk(trail: tuple[Node, ...]) -> None:
        here = trail[-1]
        if here == b:
            found.append(trail)
            return
        for there, _ in graph.neighbours(here):
            if there in trail or there not in distance:
                continue
            if len(trail) + distance[there] <= fewest + longer:
                walk((*trail, there))

    walk((a,))
    legal = [trail for trail in found if len(trail) == fewest + 1 or _one_way(trail)]
    return sorted(legal, key=len)[:limit]


def _distances(graph: Graph, b: Node, lost: frozenset[Node]) -> dict[Node, int]:
    distance, edge = {b: 0}, [b]
    while edge:
        following: list[Node] = []
        for node in edge:
            for other, _ in graph.neighbours(node):
                if other not in distance and other not in lost:
                    distance[other] = distance[node] + 1
                    following.append(other)
        edge = following
    return distance


def _one_way(trail: tuple[Node, ...]) -> bool:
    levels = np.array([_level(node) for node in trail])
    steps = np.diff(levels)
    return bool((steps > 0).all() or (steps < 0).all())  # false where a level is NaN


def _level(node: Node) -> float:
    """Return the place of a core route in the order, NaN for the others."""
    variant = bool(node.conventions) and node.route != "minque"
    if variant or node.made not in ("fit", "minque", "iterated_minque"):
        return np.nan
    return LEVELS.get(node.made if node.made == "iterated_minque" else node.route, np.nan)
