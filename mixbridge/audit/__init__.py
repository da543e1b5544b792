"""Assumptions that every route shares: what the data show about each, and what they cannot show."""

from mixbridge.audit.record import Audit, Finding, StudyView
from mixbridge.audit.registry import CHECKS, Check
from mixbridge.audit.table import audit

__all__ = ["CHECKS", "Audit", "Check", "Finding", "StudyView", "audit"]
