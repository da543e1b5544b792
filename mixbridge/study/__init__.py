"""The study: everything below, bound for the user."""

from mixbridge.study.adoption import adopt
from mixbridge.study.crosscheck import crosscheck
from mixbridge.study.record import Study

__all__ = ["Study", "adopt", "crosscheck"]
