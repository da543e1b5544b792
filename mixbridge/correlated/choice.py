"""Columns that the analyst names, by term of the formula or by name of the column."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

from mixbridge.errors import OptionError

__all__ = ["chosen_columns"]


def chosen_columns(
    option: str,
    asked: Sequence[str],
    columns: Sequence[str],
    terms: Mapping[str, slice] | None = None,
    design: Sequence[str] = (),
) -> tuple[str, ...]:
    """Return the columns that some names mean, in the order of the design.

    Parameters
    ----------
    option : str
        Name of the argument, for messages.
    asked : sequence of str
        Names of columns, or of terms, which mean all their columns.
    columns : sequence of str
        Columns that may be chosen.
    terms : mapping of str to slice, optional
        Columns of each term of the formula, as positions in `design`.
    design : sequence of str
        All design columns.

    Returns
    -------
    tuple of str

    Raises
    ------
    OptionError
        If a name is neither, or means no column that may be chosen.
    """
    if isinstance(asked, str):
        raise OptionError(f"{option}={asked!r}: give a list of names, [{asked!r}].")
    found: set[str] = set()
    known = dict(terms or {})
    for name in asked:
        meant = [name] if name in columns else list(design[known[name]]) if name in known else []
        usable = [column for column in meant if column in columns]
        if not usable:
            options = dict.fromkeys(
                [*columns, *(t for t, at in known.items() if set(design[at]) & set(columns))]
            )
            raise OptionError.not_among(option, name, options)
        found.update(usable)
    return tuple(column for column in columns if column in found)
