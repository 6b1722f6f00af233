"""A small invented sample, and ways to write it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import pandas as pd
import pytest

from remnantstats.errors import InputError

Frame = Callable[..., pd.DataFrame]


def small(**changes: Any) -> pd.DataFrame:
    """Four stars of two invented surveys; `changes` replace columns, None removes them."""
    columns: dict[str, Any] = {
        "star": ["Ash-1", "Ash-2", "Birch-1", "Birch-2"],
        "survey": ["lantern", "lantern", "harbour", "harbour"],
        "atmosphere": ["H", "H", "H", "H"],
        "cooling_age": [0.2, 0.5, 1.0, 2.5],
        "distance": [40.0, 60.0, 80.0, 120.0],
        "pollution": ["detected", "limit", "limit", "unobserved"],
        "log_accretion": [8.2, None, None, None],
        "log_accretion_err": [0.1, None, None, None],
        "log_accretion_limit": [7.5, 7.4, 7.9, None],
    }
    columns.update(changes)
    return pd.DataFrame({name: cells for name, cells in columns.items() if cells is not None})


@pytest.fixture
def frame() -> Frame:
    return small


@pytest.fixture
def write(tmp_path: Path) -> Callable[[str | bytes], Path]:
    """Write bytes or text to a file in a fresh folder."""

    def writer(content: str | bytes, name: str = "grove.csv") -> Path:
        path = tmp_path / name
        path.write_bytes(content.encode() if isinstance(content, str) else content)
        return path

    return writer


@pytest.fixture
def refused() -> Callable[..., InputError]:
    """Call something that must raise InputError and return the error."""

    def call(function: Callable[..., Any], *arguments: Any, **keywords: Any) -> InputError:
        with pytest.raises(InputError) as caught:
            function(*arguments, **keywords)
        return caught.value

    return call
