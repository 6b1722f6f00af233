"""The errors and warnings that users meet.

Every message names the place, the value found, what is allowed and the remedy.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from difflib import get_close_matches

__all__ = [
    "ExtrapolationWarning",
    "Fault",
    "InferenceError",
    "InputError",
    "ModelError",
    "RemnantStatsError",
    "RemnantStatsWarning",
    "WeakSamplingWarning",
    "nearest",
]


@dataclass(frozen=True)
class Fault:
    """One thing that is wrong with the user's input.

    Parameters
    ----------
    what : str
        What is wrong, in one sentence.
    where : str
        File, and row, star, column or TOML key.
    found : str
        The value found; empty where there is none.
    allowed : str
        What would have been accepted.
    remedy : str
        What to do.
    """

    what: str
    where: str = ""
    found: str = ""
    allowed: str = ""
    remedy: str = ""

    def __str__(self) -> str:
        parts = [
            ("where", self.where),
            ("found", self.found),
            ("allowed", self.allowed),
            ("to do", self.remedy),
        ]
        lines = [f"  {label + ':':<9}{text}" for label, text in parts if text]
        return "\n".join([self.what, *lines])


class RemnantStatsError(Exception):
    """Root of the package's errors."""

    exit_code = 1


class InputError(RemnantStatsError):
    """The user's table, study file or flag is wrong.

    Parameters
    ----------
    *faults : Fault
        All faults that were found; at least one.
    """

    exit_code = 2

    #: how many faults are written out; the rest are counted
    shown = 12

    def __init__(self, *faults: Fault) -> None:
        self.faults: tuple[Fault, ...] = faults
        super().__init__(self._message())

    def _message(self) -> str:
        if len(self.faults) == 1:
            return str(self.faults[0])
        lines = [f"{len(self.faults)} faults:"]
        lines += [f"{number}. {fault}" for number, fault in enumerate(self.faults[: self.shown], start=1)]
        if len(self.faults) > self.shown:
            lines.append(f"… and {len(self.faults) - self.shown} more of the same table")
        return "\n".join(lines)


class ModelError(InputError):
    """A population model file, or its use with this sample, is wrong."""


class InferenceError(RemnantStatsError):
    """Inference could not produce a posterior."""

    exit_code = 1


class RemnantStatsWarning(UserWarning):
    """Root of the package's warnings."""


class ExtrapolationWarning(RemnantStatsWarning):
    """A result leans on what lies outside the data."""


class WeakSamplingWarning(RemnantStatsWarning):
    """A result rests on fewer independent draws than it should."""


def nearest(name: str, known: Sequence[str]) -> str:
    """Return a phrase that names the known word nearest to `name`.

    Parameters
    ----------
    name : str
        What the user wrote.
    known : sequence of str
        What could have been written.

    Returns
    -------
    str
        ``"did you mean 'x'?"``, or a list of the known words where none is near.
    """
    near = get_close_matches(name, known, n=1, cutoff=0.6)
    if near:
        return f"did you mean '{near[0]}'?"
    return "use one of: " + ", ".join(sorted(known))
