"""Correlated effects: new columns, same routes; internal instruments; the noise of unit means."""

from mixbridge.correlated.augment import Augmented, augment, widen_products
from mixbridge.correlated.constants import unit_constant_table
from mixbridge.correlated.coordinates import Coordinates
from mixbridge.correlated.instrumented import Instrumented
from mixbridge.correlated.instruments import hausman_taylor
from mixbridge.correlated.means import WithMeans, with_unit_means
from mixbridge.correlated.minimum_distance_record import MinimumDistance, minimum_distance
from mixbridge.correlated.mundlak import Mundlak, mundlak
from mixbridge.correlated.noisy_means import NoisyMeans, noisy_means
from mixbridge.correlated.period_values import amemiya_macurdy
from mixbridge.correlated.projection import Projection, project, projection_size
from mixbridge.correlated.reduced_form_size import reduced_form_size
from mixbridge.correlated.slopes import SlopeCertificate

__all__ = [
    "Augmented",
    "Coordinates",
    "Instrumented",
    "MinimumDistance",
    "Mundlak",
    "NoisyMeans",
    "Projection",
    "SlopeCertificate",
    "WithMeans",
    "amemiya_macurdy",
    "augment",
    "hausman_taylor",
    "minimum_distance",
    "mundlak",
    "noisy_means",
    "project",
    "projection_size",
    "reduced_form_size",
    "unit_constant_table",
    "widen_products",
    "with_unit_means",
]
