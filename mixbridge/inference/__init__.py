"""Inference: covariances, references, component intervals, tests of a zero unit variance, contrasts, hypotheses."""

from mixbridge.inference.comparison import criteria, variance_explained
from mixbridge.inference.component_intervals import component_intervals
from mixbridge.inference.contrasts import Contrast, contrast_table, contrast_terms, contrasts
from mixbridge.inference.effects import effect_variances, predicted_effects
from mixbridge.inference.hypotheses import HypothesisResult, test_hypothesis
from mixbridge.inference.kenward_roger import KenwardRoger, kenward_roger
from mixbridge.inference.references import RULES, Reference, inference_table, pick_reference
from mixbridge.inference.robust import KINDS, MULTIPLIERS, RobustCovariance, robust_covariance
from mixbridge.inference.robust_two_way import two_way_covariance
from mixbridge.inference.satterthwaite import satterthwaite
from mixbridge.inference.variance_tests import variance_tests
from mixbridge.inference.zero_estimate import zero_probabilities

__all__ = [
    "KINDS",
    "MULTIPLIERS",
    "RULES",
    "Contrast",
    "HypothesisResult",
    "KenwardRoger",
    "Reference",
    "RobustCovariance",
    "component_intervals",
    "contrast_table",
    "contrast_terms",
    "contrasts",
    "criteria",
    "effect_variances",
    "inference_table",
    "kenward_roger",
    "pick_reference",
    "predicted_effects",
    "robust_covariance",
    "satterthwaite",
    "test_hypothesis",
    "two_way_covariance",
    "variance_explained",
    "variance_tests",
    "zero_probabilities",
]
