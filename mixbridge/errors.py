"""The errors users meet: one root, a few heirs, each message says what, where and what to do."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = [
    "DataError",
    "DisagreementError",
    "FormulaError",
    "IdentificationError",
    "MixbridgeError",
    "OptionError",
]


class MixbridgeError(Exception):
    """Root of every error that mixbridge raises on purpose."""


class DataError(MixbridgeError, ValueError):
    """The data cannot be used as they are."""


class FormulaError(MixbridgeError, ValueError):
    """The formula cannot be read, or asks for something that is not there."""


class OptionError(MixbridgeError, ValueError):
    """An argument has a value that is not allowed."""

    @classmethod
    def not_among(cls, name: str, value: object, allowed: Iterable[object]) -> OptionError:
        """Make the error for a value outside a list of allowed ones."""
        options = list(allowed)
        return cls(
            f"{name}={value!r} is not known; allowed: {', '.join(map(str, options))}."
            + nearest(str(value), map(str, options))
        )


class IdentificationError(MixbridgeError, ValueError):
    """The data do not determine what was asked for."""


class DisagreementError(MixbridgeError):
    """Routes that were required to agree do not."""


def nearest(name: str, available: Iterable[str]) -> str:
    """Return a sentence with the closest available name, or an empty string.

    Parameters
    ----------
    name : str
        What was asked for.
    available : iterable of str
        What exists.

    Returns
    -------
    str
        ``" Did you mean 'x'?"`` or ``""``.
    """
    close = difflib.get_close_matches(name, list(available), n=1, cutoff=0.6)
    return f" Did you mean {close[0]!r}?" if close else ""
