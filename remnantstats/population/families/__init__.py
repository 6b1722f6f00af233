"""Families of true values, one a file."""

from . import normal, power_law, student_t
from .base import FAMILIES, Family, register

__all__ = ["FAMILIES", "Family", "normal", "power_law", "register", "student_t"]
