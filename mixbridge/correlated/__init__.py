"""Correlated effects: new columns, same routes."""

from mixbridge.correlated.means import WithMeans, with_unit_means

__all__ = ["WithMeans", "with_unit_means"]
