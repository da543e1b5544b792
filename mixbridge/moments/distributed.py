"""Closed moments of a Dask DataFrame: parts, buckets of units, and trees, as graphs of tasks.

Each partition gives its moments; those of small neighbours are merged, and cut into buckets by unit; the pieces of a
bucket are merged in a tree; buckets are closed where they are and pooled in a tree. Only the closed moments reach the
caller, and before them what each partition tells of its rows (counts, extremes, levels). Every task depends on its
inputs alone, so that the scheduler may repeat what a lost worker held, and the number of buckets and the shape of the
trees depend on the data alone, so that results do not depend on the number of workers.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import partial
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray

from mixbridge.moments.closed import LOSS_LIMIT, Moments
from mixbridge.moments.factors import factor_from_products, stack_factors
from mixbridge.moments.parted import (
    Errand,
    Part,
    Sorting,
    add_within,
    bucket_piece,
    grown_of,
    merge_pieces,
    sort_units,
    take_part,
    within_of,
    without_pairs,
)
from mixbridge.moments.parted_closing import (
    Frame,
    close_bucket,
    factor_of_part,
    finish,
    keys_of_part,
    means_of,
    pool_classes,
    settle,
    summarise,
)
from mixbridge.moments.parted_look import book_of, look_at_part
from mixbridge.panel.parted import Recipe, Told, changed
from mixbridge.panel.parted_learn import PartBook
from mixbridge.panel.parted_panel import PartedRows
from mixbridge.sources.dask_source import DaskSource, computed, delayed, kept, tree

__all__ = ["BUCKET_BYTES", "Distributed", "Looks", "distributed_moments"]

FloatArray = NDArray[np.float64]

BUCKET_BYTES = 2**25
"""Bytes that the pieces of one bucket may take together; a worker holds a few buckets at a time."""
MOST_BUCKETS = 128
"""Buckets at most: every group of parts makes one task for each."""
_PAIR_BYTES = 32
"""Bytes of the unit and period of a row."""


class Looks:
    """First looks at the partitions, kept where the partitions are until their moments are merged.

    Parameters
    ----------
    source : DaskSource
    """

    def __init__(self, source: DaskSource) -> None:
        self._source = source
        self.found: list[Any] | None = None

    def read(self, recipe: Recipe, told: tuple[Told, ...], wanted: Sequence[str]) -> list[PartBook]:
        """Look at every partition, and fetch what it tells but not its moments.

        Parameters
        ----------
        recipe : Recipe
        told : tuple of Told
        wanted : sequence of str
            Columns to read.
        """
        looks = kept(
            [delayed(look_at_part, recipe, told, place)(lazy) for lazy, place in self._source.parts(wanted)]
        )
        answers = computed(*[delayed(book_of)(look) for look in looks])
        if all(complete for _, complete in answers):
            self.found = looks
        return [book for book, _ in answers]


@dataclass(frozen=True, slots=True, eq=False)
class Distributed:
    """Closed moments, and how they came about.

    Attributes
    ----------
    moments : Moments
    buckets : int
        Number of buckets.
    second : bool
        Whether the rows were read once more for the within factor.
    """

    moments: Moments
    buckets: int
    second: bool


def distributed_moments(source: DaskSource, rows: PartedRows, looks: Looks) -> Distributed:
    """Take closed moments where the partitions are.

    Parameters
    ----------
    source : DaskSource
    rows : PartedRows
        What was learned.
    looks : Looks
        First looks at the partitions; their moments are used where they were taken.

    Returns
    -------
    Distributed

    Raises
    ------
    DataError
        If there is one unit only, the outcome never changes, a pair of unit and period is repeated, or the data are
        not what they were when they were learned from.
    """
    keys, names = rows.taught.recipe.keys, (*rows.names, rows.outcome)
    columns = tuple(name for j, name in enumerate(names) if j != rows.constant)
    groups, sorting = _sorting(rows.books, len(columns), periods=len(keys) > 1)
    errand = Errand(rows.taught, columns, rows.origin, sorting)
    parts = [(number, Part(book.place, book.used)) for number, book in enumerate(rows.books) if book.used]
    if looks.found is None:
        lazy = [frame for frame, _ in source.parts(rows.wanted)]
        grown = [delayed(take_part, errand, part)(lazy[number]) for number, part in parts]
    else:
        grown = [delayed(grown_of)(looks.found[number]) for number, _ in parts]
    taken = [
        delayed(sort_units, errand, [part for _, part in parts[some]])(grown[some])
        for some in _slices(len(parts), groups)
    ]
    merged = partial(merge_pieces, keys)
    buckets = [
        delayed(without_pairs)(tree(merged, [delayed(bucket_piece, number)(each) for each in taken]))
        for number in range(sorting.buckets)
    ]
    within = tree(add_within, [delayed(within_of)(each) for each in taken])
    frame = delayed(settle, errand, names)(within, [delayed(summarise)(bucket) for bucket in buckets])
    classes = tree(pool_classes, [delayed(close_bucket)(frame, bucket) for bucket in buckets])
    settled, pooled = computed(frame, classes)
    if settled.rows != sum(book.used for book in rows.books):
        raise changed("the data as a whole")
    products = settled.within.products
    if settled.within.loss.max() <= LOSS_LIMIT and factor_from_products(products) is not None:
        return Distributed(finish(settled, pooled), sorting.buckets, second=False)
    lazy = [frame for frame, _ in source.parts(rows.wanted)]
    found = [_factor(errand, settled, part, lazy[number], buckets) for number, part in parts]
    (factor,) = computed(tree(_stacked, found))
    return Distributed(finish(settled, pooled, factor), sorting.buckets, second=True)


def _factor(errand: Errand, settled: Frame, part: Part, lazy: Any, buckets: Sequence[Any]) -> Any:
    """Return the lazy within factor of a part: the means of its units come back from the buckets."""
    keys = delayed(keys_of_part, errand, part)(lazy)
    means = [delayed(means_of, number)(keys, bucket) for number, bucket in enumerate(buckets)]
    return delayed(factor_of_part, errand, settled, part)(lazy, (keys, means))


def _stacked(factors: Sequence[FloatArray]) -> FloatArray:
    return stack_factors(*factors)


def _sorting(books: Sequence[PartBook], k: int, *, periods: bool) -> tuple[int, Sorting]:
    """Choose the numbers of groups and of buckets from what the parts told, never from the workers.

    Small parts are merged in groups of neighbours, which hold units of the same bytes as a bucket would if no unit were
    split; large ones are groups of their own.
    """
    told = [book for book in books if book.used]
    size = sum(book.units for book in told) * 8 * (k + 2)
    if periods:
        size += sum(book.used for book in told) * _PAIR_BYTES
    types = {book.key[1] for book in told if book.key is not None}
    wanted = max(1, -(-size // BUCKET_BYTES))
    as_text = len(types) != 1 or types == {"object"}
    return min(wanted, len(told)), Sorting(min(wanted, MOST_BUCKETS), as_text)


def _slices(count: int, groups: int) -> list[slice]:
    """Cut a count into groups of neighbours whose sizes differ by one at most."""
    cuts = [count * number // groups for number in range(groups + 1)]
    return [slice(*pair) for pair in pairwise(cuts)]
