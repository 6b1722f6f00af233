"""What could have been seen: limits and efficiencies in one form."""

from .curve import CHANNELS, Channel, DetectionCurve, detection_curve, midpoint_shift, recovery_index
from .impute import FilledLimits, filled_limits
from .recovery import RecoveryTable, fit_efficiency, read_recovery
from .settings import ChannelSettings

__all__ = [
    "CHANNELS",
    "Channel",
    "ChannelSettings",
    "DetectionCurve",
    "FilledLimits",
    "RecoveryTable",
    "detection_curve",
    "filled_limits",
    "fit_efficiency",
    "midpoint_shift",
    "read_recovery",
    "recovery_index",
]
