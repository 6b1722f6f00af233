"""What do the data say? Two engines on one likelihood, checks and the stored fit.

Importing this loads neither PyMC nor a compiler; the engine of record loads them when it is called.
"""

from .checks import Check
from .engine import fit_problem
from .fit import Fit

__all__ = ["Check", "Fit", "fit_problem"]
