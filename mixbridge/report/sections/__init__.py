"""Sections of the appendix, each a function from a record and a vocabulary to blocks."""

from mixbridge.report.sections.agreement import agreement_section, agreement_sentence, attribution_section
from mixbridge.report.sections.assumptions import exogeneity_section, exogeneity_sentence, zero_section
from mixbridge.report.sections.audit import audit_section
from mixbridge.report.sections.closing import limits_section, references_section, software_section
from mixbridge.report.sections.coefficients import (
    coefficient_section,
    coefficient_text,
    component_section,
    component_text,
)
from mixbridge.report.sections.data import data_section, rows_text
from mixbridge.report.sections.estimator import chosen_text, estimator_section, estimator_text
from mixbridge.report.sections.model import model_section, model_text, vocabulary_section
from mixbridge.report.sections.optimum import identity_section, optimum_section
from mixbridge.report.sections.sensitivity import sensitivity_section

__all__ = [
    "agreement_section",
    "agreement_sentence",
    "attribution_section",
    "audit_section",
    "chosen_text",
    "coefficient_section",
    "coefficient_text",
    "component_section",
    "component_text",
    "data_section",
    "estimator_section",
    "estimator_text",
    "exogeneity_section",
    "exogeneity_sentence",
    "identity_section",
    "limits_section",
    "model_section",
    "model_text",
    "optimum_section",
    "references_section",
    "rows_text",
    "sensitivity_section",
    "software_section",
    "vocabulary_section",
    "zero_section",
]
