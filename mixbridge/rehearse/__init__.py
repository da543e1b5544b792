"""Rehearsal: how every route behaves on a design under a stated truth, before or after the data come."""

from mixbridge.rehearse.design import Design
from mixbridge.rehearse.detectable import minimum_detectable
from mixbridge.rehearse.record import Rehearsal
from mixbridge.rehearse.rehearsing import growth, rehearse
from mixbridge.rehearse.truth import Truth

__all__ = ["Design", "Rehearsal", "Truth", "growth", "minimum_detectable", "rehearse"]
