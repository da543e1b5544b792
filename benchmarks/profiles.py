"""How large and how often: the same problems for a test, for a look, and for the published table."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Profile:
    """Sizes and repeats.

    Attributes
    ----------
    name : str
    units : int
        Units of 1 to 19 rows of the large panel (ten rows per unit on average).
    rounds, frame_rounds : int
        Rounds of the array problems, and of those that start from a frame.
    likelihood_units : int
        Units of the panel on which the likelihoods are compared.
    likelihood_panels : int
        Further small panels on which only the deviances are compared.
    rows : tuple of int
        Numbers of rows at which all routes are timed after the moments.
    distinct : tuple of int
        Numbers of distinct unit sizes.
    """

    name: str
    units: int
    rounds: int
    frame_rounds: int
    likelihood_units: int
    likelihood_panels: int
    rows: tuple[int, ...]
    distinct: tuple[int, ...]


PROFILES = {
    "tiny": Profile("tiny", 200, 1, 1, 60, 2, (1_000, 2_000), (5, 10)),
    "quick": Profile(
        "quick", 100_000, 5, 3, 10_000, 8, (10_000, 100_000, 1_000_000), (10, 30, 100, 300, 1_000)
    ),
    "full": Profile(
        "full",
        100_000,
        15,
        7,
        10_000,
        40,
        (10_000, 100_000, 1_000_000, 10_000_000),
        (10, 30, 100, 300, 1_000),
    ),
}
"""``tiny`` is for the tests: its times mean nothing."""
