"""What the remnants say of planets: from the debris fraction to an occurrence prior, and its export."""

from .export import read_prior, write_prior
from .prior import OccurrencePrior
from .settings import Assumption, TransferSettings, parse_transfer
from .transfer import occurrence_prior

__all__ = [
    "Assumption",
    "OccurrencePrior",
    "TransferSettings",
    "occurrence_prior",
    "parse_transfer",
    "read_prior",
    "write_prior",
]
