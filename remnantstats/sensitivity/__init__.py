"""What could have been seen: limits and efficiencies in one form."""

from .curve import CHANNELS, Channel, DetectionCurve, detection_curve, midpoint_shift
from .impute import FilledLimits, filled_limits
from .settings import ChannelSettings

__all__ = [
    "CHANNELS",
    "Channel",
    "ChannelSettings",
    "DetectionCurve",
    "FilledLimits",
    "detection_curve",
    "filled_limits",
    "midpoint_shift",
]
