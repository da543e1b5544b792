"""Chains of estimators with numbers: what each link moves the ratio, its weight and a coefficient by."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from mixbridge.ratio import Curve
from mixbridge.reconcile.attribution_changes import POOLED, WITHIN, changes_of
from mixbridge.reconcile.attribution_graph import Graph, legal_chains
from mixbridge.reconcile.attribution_node import CAUSES, TRUNCATION, UNSPLIT, Change, Node, node_of
from mixbridge.reconcile.attribution_positions import Move, Position, Positions
from mixbridge.routes import Fit

__all__ = ["Link", "links_between", "median_size", "weight_at"]

BOUNDED = ("pooled", "within", "gls", "ml", "reml")
"""Routes that are never below zero, so that a change to or from them starts and ends after truncation."""


@dataclass(frozen=True, slots=True)
class Link:
    """One change in a chain, with what it does to a coefficient.

    Attributes
    ----------
    move : Move
    weight_from, weight_to : float
        ``lambda`` at the median size.
    coefficient_change : float
    """

    move: Move
    weight_from: float
    weight_to: float
    coefficient_change: float

    @property
    def cause(self) -> str:
        """Key of `attribution_node.CAUSES`."""
        return self.move.cause

    @property
    def weight_change(self) -> float:
        """Change of ``lambda`` at the median size."""
        return self.weight_to - self.weight_from


def median_size(curve: Curve) -> float:
    """Return the median number of rows of a unit."""
    return float(np.median(np.repeat(curve.sizes, curve.counts.astype(int))))


def weight_at(ratio: float, size: float) -> float:
    """Return ``1 - (1 + T psi)^(-1/2)``; one at an infinite ratio."""
    return 1.0 if np.isinf(ratio) else float(-np.expm1(-0.5 * np.log1p(size * ratio)))


def links_between(
    positions: Positions, a: Fit, b: Fit, term: str, longer: int
) -> tuple[tuple[tuple[Link, ...], ...], tuple[str, ...]]:
    """Return the legal chains from b to a with their numbers, and notes on estimators that could not be used.

    Parameters
    ----------
    positions : Positions
    a, b : Fit
        Two routes on the curve.
    term : str
    longer : int
        How many more changes than the fewest a legal chain may have.

    Returns
    -------
    chains : tuple of tuple of Link
        One chain of one link, cause ``not split``, where no chain of estimators connects the two; none where
        both are the same estimator of the ratio.
    notes : tuple of str
    """
    start, end = node_of(b), node_of(a)
    if start == end:
        return (), ()
    key = (start, end, longer)
    if key not in positions.walks:
        positions.walks[key] = _walks(positions, start, end, longer)
    walks, notes = positions.walks[key]
    at, size = positions.curve.names.index(term), median_size(positions.curve)
    return tuple(tuple(_link(positions, move, at, size) for move in walk) for walk in walks), notes


def _walks(
    positions: Positions, start: Node, end: Node, longer: int
) -> tuple[tuple[tuple[Move, ...], ...], tuple[str, ...]]:
    """Find the legal chains whose nodes these data all give."""
    graph = Graph(changes_of((start, end)))
    ends = {start, end}
    lost = frozenset({POOLED, WITHIN} - ends)
    refused: list[str] = []
    while True:
        trails = legal_chains(graph, start, end, lost, longer=longer)
        missing = [
            node
            for node in dict.fromkeys(node for trail in trails for node in trail)
            if not positions.at(node).available
        ]
        usable = [trail for trail in trails if not set(trail) & set(missing)]
        refused += [f"{node.label} ({positions.at(node).status})" for node in missing]
        if usable or not trails:
            break
        lost |= frozenset(missing)
    changes = {(change.a, change.b): change for change in graph.changes}
    walks = tuple(_moves(positions, trail, changes) for trail in usable)
    if not walks:
        here, there = positions.at(start), positions.at(end)
        move = Move(start.label, end.label, UNSPLIT, CAUSES[UNSPLIT], here.ratio, there.ratio)
        walks = ((move,),)
    notes = (f"no chain goes through {'; '.join(refused)}",) if refused else ()
    return walks, notes


def _moves(
    positions: Positions, trail: tuple[Node, ...], changes: dict[tuple[Node, Node], Change]
) -> tuple[Move, ...]:
    """Return the moves of one chain, truncation as moves of their own."""
    moves: list[Move] = []
    ratio = positions.at(trail[0]).ratio
    for before, after in pairwise(trail):
        here, there = positions.at(before), positions.at(after)
        bounded = before.route in BOUNDED or after.route in BOUNDED
        ratio = _cut(moves, here, ratio, here.ratio if bounded else here.raw)
        change = changes.get((before, after))
        sentence = change.sentence if change is not None else changes[(after, before)].back
        cause = (change or changes[(after, before)]).cause
        to = there.ratio if bounded else there.raw
        moves.append(Move(_name(here, ratio), _name(there, to), cause, sentence, ratio, to))
        ratio = to
    last = positions.at(trail[-1])
    _cut(moves, last, ratio, last.ratio)
    return tuple(moves)


def _name(position: Position, ratio: float) -> str:
    """Return the name of a node on one side of its truncation."""
    before = position.cut and ratio == position.raw
    return f"{position.node.label} before truncation" if before else position.node.label


def _cut(moves: list[Move], here: Position, ratio: float, wanted: float) -> float:
    """Add the move from one side of the truncation of a node to the other, if it is on the wrong one."""
    if ratio != wanted:
        names = _name(here, ratio), _name(here, wanted)
        done = "kept" if wanted < 0.0 else "replaced by zero"
        moves.append(Move(*names, TRUNCATION, f"the negative unit variance is {done}", ratio, wanted))
    return wanted


def _link(positions: Positions, move: Move, at: int, size: float) -> Link:
    weights = [weight_at(ratio, size) for ratio in (move.ratio_from, move.ratio_to)]
    change = positions.beta(move.ratio_to)[at] - positions.beta(move.ratio_from)[at]
    return Link(move, weights[0], weights[1], float(change))
