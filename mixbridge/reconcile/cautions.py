"""Sentences that guard a claim of this package wherever the claim is shown."""

from __future__ import annotations

__all__ = ["IDENTITIES_HEADING", "IDENTITIES_LIMIT"]

IDENTITIES_HEADING = "These check the arithmetic, not the model."
"""Above every list of identities."""

IDENTITIES_LIMIT = (
    "An identity that holds shows that two computations on these rows agree as they must. It does not "
    "show that unit effects are "
    "unrelated to the covariates, that errors have one variance, or that the covariates are the right "
    "ones: all routes share these "
    "assumptions and would agree just as well if they were wrong."
)
"""Below it, where there is room."""
