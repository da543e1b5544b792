"""Resampling in moment space: replicates of a panel under a stated model, from a few numbers per size class."""

from mixbridge.resample.moment_draws import Truth, truth_of
from mixbridge.resample.replicates import Replicates, replicate

__all__ = ["Replicates", "Truth", "replicate", "truth_of"]
