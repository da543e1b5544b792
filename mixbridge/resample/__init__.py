"""Resampling in moment space: replicates of a panel under a stated model, from a few numbers per size class."""

from mixbridge.resample.bootstrap import Bootstrap, bootstrap
from mixbridge.resample.gaps import GapNoise
from mixbridge.resample.moment_draws import Truth, truth_of
from mixbridge.resample.replicates import Replicates, replicate
from mixbridge.resample.zero_test import zero_tests

__all__ = [
    "Bootstrap",
    "GapNoise",
    "Replicates",
    "Truth",
    "bootstrap",
    "replicate",
    "truth_of",
    "zero_tests",
]
