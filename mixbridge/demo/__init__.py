"""Invented data to try things on: honey by apiary and season."""

from __future__ import annotations

from pathlib import Path

import pandas as pd

__all__ = ["apiaries", "path"]


def path() -> Path:
    """Say where the file with the apiary data is.

    Returns
    -------
    pathlib.Path
        The file ``apiaries.csv`` inside the package.

    Examples
    --------
    >>> from mixbridge import demo
    >>> demo.path().name
    'apiaries.csv'
    """
    return Path(__file__).with_name("apiaries.csv")


def apiaries() -> pd.DataFrame:
    """Load the apiary data.

    Returns
    -------
    pandas.DataFrame
        Columns ``apiary``, ``season``, ``honey`` (kg per hive), ``forage`` (index), ``feeding`` (kg of sugar
        per hive) and ``altitude`` (m); one row per apiary and season, some cells of honey and forage missing.

    Notes
    -----
    The data are invented. `mixbridge.demo.make` says with which true values, and makes the file again.

    Examples
    --------
    >>> from mixbridge import demo
    >>> frame = demo.apiaries()
    >>> list(frame.columns)
    ['apiary', 'season', 'honey', 'forage', 'feeding', 'altitude']
    >>> int(frame["altitude"].groupby(frame["apiary"]).nunique().max())
    1
    """
    return pd.read_csv(path())
