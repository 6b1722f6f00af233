"""What was observed? Tables of any usual format become one checked `Sample`."""

from .census import census, depth, error_notes
from .columns import COLUMNS
from .reading import read_sample
from .rules import ChannelRules, RowRules
from .sample import Sample, Source
from .settings import SampleSettings
from .writer import to_ecsv

__all__ = [
    "COLUMNS",
    "ChannelRules",
    "RowRules",
    "Sample",
    "SampleSettings",
    "Source",
    "census",
    "depth",
    "error_notes",
    "read_sample",
    "to_ecsv",
]
