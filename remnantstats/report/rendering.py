"""Rendering of all figures, on two cores where that is safe."""

from __future__ import annotations

import multiprocessing
import os
import sys
import threading
import warnings
from collections.abc import Sequence
from pathlib import Path

from .gallery import Plate
from .style import save_figure

__all__ = ["save_plates"]


def save_plates(plates: Sequence[Plate], folder: Path) -> dict[str, bytes]:
    """Draw and save every figure as PNG and PDF.

    Parameters
    ----------
    plates : sequence of Plate
    folder : pathlib.Path
        An existing folder.

    Returns
    -------
    dict of str to bytes
        The PNG of each, by name.
    """
    if not _may_fork():
        return {plate.name: save_figure(plate.draw(), folder / plate.name) for plate in plates}
    theirs = plates[1::2]
    with warnings.catch_warnings():
        # newer interpreters warn of forking beside threads; those of the linear-algebra library are idle here
        warnings.simplefilter("ignore", DeprecationWarning)
        helper = multiprocessing.get_context("fork").Process(target=_save_each, args=(theirs, folder))
        helper.start()
    _save_each(plates[::2], folder)
    helper.join()
    if helper.exitcode != 0:
        # whatever was wrong there is met, and told, here
        _save_each(theirs, folder)
    return {plate.name: (folder / f"{plate.name}.png").read_bytes() for plate in plates}


def _save_each(plates: Sequence[Plate], folder: Path) -> None:
    for plate in plates:
        save_figure(plate.draw(), folder / plate.name)


def _may_fork() -> bool:
    """Whether a second process may share the work: not where a compiler or a sampler has started threads of its own."""
    if not hasattr(os, "fork") or (os.cpu_count() or 1) < 2 or sys.platform == "darwin":
        return False
    return threading.active_count() == 1 and not {"pytensor", "nutpie"} & set(sys.modules)
