"""What is known now: poses, features, energy, efficacy."""

from .efficacy import EfficacyBelief
from .energy import EnergyBelief
from .features import FeatureBelief
from .poses import PoseBelief

__all__ = ["EfficacyBelief", "EnergyBelief", "FeatureBelief", "PoseBelief"]
