"""Sections of the appendix, each a function from a record and a vocabulary to blocks."""

from mixbridge.report.sections.agreement import agreement_section, attribution_section
from mixbridge.report.sections.assumptions import audit_section, exogeneity_section, zero_section
from mixbridge.report.sections.closing import limits_section, references_section, software_section
from mixbridge.report.sections.coefficients import coefficient_section, component_section
from mixbridge.report.sections.model import data_section, estimator_section, model_section
from mixbridge.report.sections.optimum import identity_section, optimum_section
from mixbridge.report.sections.sensitivity import sensitivity_section

__all__ = [
    "agreement_section",
    "attribution_section",
    "audit_section",
    "coefficient_section",
    "component_section",
    "data_section",
    "estimator_section",
    "exogeneity_section",
    "identity_section",
    "limits_section",
    "model_section",
    "optimum_section",
    "references_section",
    "sensitivity_section",
    "software_section",
    "zero_section",
]
