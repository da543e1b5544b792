"""Rehearsal: how every route behaves on a design under a stated truth, before or after the data come."""

import sys
from types import ModuleType
from typing import Any

from mixbridge.rehearse.design import Design
from mixbridge.rehearse.detectable import minimum_detectable
from mixbridge.rehearse.record import Rehearsal
from mixbridge.rehearse.rehearsing import growth, rehearse
from mixbridge.rehearse.truth import Truth

__all__ = ["Design", "Rehearsal", "Truth", "growth", "minimum_detectable", "rehearse"]


class _Rehearse(ModuleType):
    """The package under its public name: ``mixbridge.rehearse(design, truth)`` is `rehearse`."""

    def __call__(self, *given: Any, **named: Any) -> Rehearsal:
        return rehearse(*given, **named)


sys.modules[__name__].__class__ = _Rehearse
