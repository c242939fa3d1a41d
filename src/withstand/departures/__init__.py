"""The ways the assumptions fail. Each acts on one layer of the response; a stack of them is a world.

One file a layer; `base` holds the layers and the registry, `world` composes a stack and turns shared noise into errors.
"""

# The order of import is the order of the registry, from the mean down to single rows.
# isort: off
from withstand.departures.mean import Curvature
from withstand.departures.spread import Bowtie, Fan
from withstand.departures.power_spread import PowerSpread
from withstand.departures.level_spread import LevelSpread
from withstand.departures.worst_fan import WorstFan
from withstand.departures.dependence import Clusters, Serial
from withstand.departures.shape import Contaminated, HeavyTails, Skew
from withstand.departures.outliers import Outliers

# isort: on
from withstand.departures.base import REGISTRY, Departure, Layer, NoiseStream, departure_class
from withstand.departures.law import Law
from withstand.departures.world import Disturbance, World

__all__ = [
    "REGISTRY",
    "Bowtie",
    "Clusters",
    "Contaminated",
    "Curvature",
    "Departure",
    "Disturbance",
    "Fan",
    "HeavyTails",
    "Law",
    "Layer",
    "LevelSpread",
    "NoiseStream",
    "Outliers",
    "PowerSpread",
    "Serial",
    "Skew",
    "World",
    "WorstFan",
    "departure_class",
]
