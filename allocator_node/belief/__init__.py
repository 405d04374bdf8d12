"""What is known now: poses, targets, features, energy, efficacy."""

from .efficacy import EfficacyBelief
from .energy import EnergyBelief
from .features import FeatureBelief
from .poses import PoseBelief
from .targets import TargetBelief

__all__ = ["EfficacyBelief", "EnergyBelief", "FeatureBelief", "PoseBelief", "TargetBelief"]
