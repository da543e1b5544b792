"""The study: everything below, bound for the user."""

from mixbridge.study.adoption import adopt
from mixbridge.study.crosscheck import crosscheck
from mixbridge.study.from_moments import from_moments
from mixbridge.study.record import Study

__all__ = ["Study", "adopt", "crosscheck", "from_moments"]
