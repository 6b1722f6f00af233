"""Families of true values, one a file."""

from . import normal
from .base import FAMILIES, Family, register

__all__ = ["FAMILIES", "Family", "normal", "register"]
