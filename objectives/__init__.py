"""What is asked of a set of modes: values, derivatives, requirements. Imports numpy, nothing of ours."""

from objectives.base import AtLeast, AtMost, Maximise, Minimise, Objective, Requirement, Target
from objectives.frequency import BeatPeriod, Frequency, FrequencyRatio, Period, Splitting
from objectives.keep_out import KeepOut, bands_from_orders
from objectives.parts import Cost, LeastChange, StaticSag, TotalMass
from objectives.shape import EnergyShare, NodalPoint, Shape
from objectives.state import Like, Sag
from objectives.transfer import HandedAmplitude, TransferCompleteness, TransferTime

__all__ = [
    "AtLeast",
    "AtMost",
    "BeatPeriod",
    "Cost",
    "EnergyShare",
    "Frequency",
    "FrequencyRatio",
    "HandedAmplitude",
    "KeepOut",
    "LeastChange",
    "Like",
    "Maximise",
    "Minimise",
    "NodalPoint",
    "Objective",
    "Period",
    "Requirement",
    "Sag",
    "Shape",
    "Splitting",
    "StaticSag",
    "Target",
    "TotalMass",
    "TransferCompleteness",
    "TransferTime",
    "bands_from_orders",
]
