"""The audit of what every route assumes."""

from __future__ import annotations

from typing import TYPE_CHECKING

from mixbridge.study.resampling import StudyResampling

if TYPE_CHECKING:
    from mixbridge.audit import Audit

__all__ = ["StudyAudit"]


class StudyAudit(StudyResampling):
    """The part of a study about the assumptions that all routes share."""

    def audit(self) -> Audit:
        """Say for every shared assumption what the data show, what it would do, and what may not be concluded.

        Returns
        -------
        Audit
            One row per check: statistic, reference, p value, size of the departure, consequence, conclusion with the
            departure detectable at power 0.8. Tests never choose the estimator. Print it for sentences.
        """
        from mixbridge.audit import audit

        return audit(self)
