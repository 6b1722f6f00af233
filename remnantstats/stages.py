"""Finished stages on disk, so that a killed or repeated run does not sample again."""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any
from zipfile import BadZipFile

import numpy as np
import numpy.typing as npt

from .files import atomic_path

__all__ = ["StageStore"]


@dataclass(frozen=True)
class StageStore:
    """Draws of finished sampling, each under the hash of all it depends on.

    Attributes
    ----------
    folder : pathlib.Path
        Hidden folder inside the output directory.
    fresh : bool
        Read nothing; write all the same.
    """

    folder: Path
    fresh: bool = False

    def load(self, key: str) -> dict[str, npt.NDArray[Any]] | None:
        """Arrays stored under a key; None where there are none, or the file is damaged."""
        path = self._path(key)
        if self.fresh or not path.is_file():
            return None
        try:
            with np.load(path, allow_pickle=False) as stored:
                return {name: stored[name] for name in stored.files}
        except (OSError, ValueError, BadZipFile, KeyError):
            return None

    def save(self, key: str, arrays: dict[str, npt.NDArray[Any]]) -> None:
        """Store arrays under a key, whole or not at all."""
        with atomic_path(self._path(key)) as temporary:
            np.savez(temporary, **arrays)  # type: ignore[arg-type]

    def _path(self, key: str) -> Path:
        return self.folder / f"draws-{key[:32]}.npz"
