"""What is out there: population models, their marginal likelihood and simulation from them."""

from .pose import pose
from .problem import Problem
from .spec import PopulationModel, load_model, model_names

__all__ = ["PopulationModel", "Problem", "load_model", "model_names", "pose"]
