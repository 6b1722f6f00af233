"""Is it right? Synthetic surveys and simulation-based calibration."""

from .sbc import CalibrationReport, calibrate
from .synthetic import Design, SyntheticSurvey, draw_survey, write_survey

__all__ = ["CalibrationReport", "Design", "SyntheticSurvey", "calibrate", "draw_survey", "write_survey"]
