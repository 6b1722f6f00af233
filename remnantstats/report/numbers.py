"""How numbers are written: one way, for sentences, tables, captions and alternative texts."""

from __future__ import annotations

import math
import re
from typing import Any

__all__ = [
    "MINUS",
    "chance",
    "count",
    "decimals_for",
    "measure",
    "number",
    "plain",
    "plain_interval",
    "row_measure",
    "span",
    "typeset",
]

MINUS = "−"
#: most decimals that are ever written
_MOST = 6
#: a hyphen before a figure, or in an exponent, that stands for a minus
_HYPHEN = re.compile(r"(?<![\w)\]])-(?=\.?\d)|(?<=\de)-(?=\d)")


def decimals_for(error: float, digits: int = 2) -> int:
    """Decimals at which a positive error shows `digits` significant digits, 0 to 6."""
    if not math.isfinite(error) or error <= 0:
        return 2
    # rounding may carry into the next decade: 0.0996 is 0.10, not 0.100
    leading = math.floor(math.log10(float(f"{error:.{digits - 1}e}")))
    return min(max(digits - 1 - leading, 0), _MOST)


def number(value: float, decimals: int = 2) -> str:
    """Write a number with a true minus sign and no negative zero; a dash where there is none."""
    if value is None or not math.isfinite(value):
        return "–" if value is None or math.isnan(value) else ("∞" if value > 0 else f"{MINUS}∞")
    text = f"{value:.{decimals}f}"
    if float(text) == 0:
        text = text.lstrip("-")
    return text.replace("-", MINUS)


def measure(middle: float, low: float, high: float) -> str:
    """Write a median with the distances to its 16 and 84 % points: ``0.36 (+0.14 −0.07)``.

    The larger distance has two significant digits, the smaller at least one.

    Parameters
    ----------
    middle, low, high : float
        The three points, `low` ≤ `middle` ≤ `high`.

    Returns
    -------
    str
    """
    if not math.isfinite(middle):
        return number(middle)
    up, down = high - middle, middle - low
    if not (math.isfinite(up) and math.isfinite(down)):
        return number(middle)
    if up <= 0 and down <= 0:
        return f"{plain(middle)} (fixed)"
    decimals = _decimals(up, down)
    return f"{number(middle, decimals)} (+{number(up, decimals)} {MINUS}{number(down, decimals)})"


def _decimals(up: float, down: float) -> int:
    smaller = min(error for error in (up, down) if error > 0)
    return max(decimals_for(max(up, down)), decimals_for(smaller, 1))


def row_measure(row: Any) -> str:
    """Write a row of a summary (`q50`, `q16`, `q84`) as `measure` does."""
    return measure(float(row.q50), float(row.q16), float(row.q84))


def span(row: Any) -> str:
    """Write the 5 to 95 % interval of a summary's row, with the decimals of its `measure`."""
    up, down = float(row.q84 - row.q50), float(row.q50 - row.q16)
    if up <= 0 and down <= 0:
        return "–"
    return plain_interval(float(row.q05), float(row.q95), _decimals(up, down))


def plain_interval(low: float, high: float, decimals: int) -> str:
    """Write an interval: ``0.21 to 0.48``."""
    return f"{number(low, decimals)} to {number(high, decimals)}"


def plain(value: float) -> str:
    """Write a number as set by a person: no more digits than it has."""
    return f"{value:.6g}".replace("-", MINUS)


def typeset(text: str) -> str:
    """Give the negative numbers of a text true minus signs; words and ranges stay."""
    return _HYPHEN.sub(MINUS, text)


def chance(probability: float) -> str:
    """Write a probability with as many digits as tell it from 0 and 1."""
    if not math.isfinite(probability):
        return "–"
    if 0 < probability < 0.001:
        return f"{probability:.1g}".replace("-", MINUS)
    if 0.9995 <= probability < 1:
        return "above 0.999"
    return number(probability, 3 if probability < 0.1 or probability > 0.9 else 2)


def count(number_of: int, one: str, many: str = "") -> str:
    """Write a count with its noun: ``1 star``, ``1,204 stars``."""
    return f"{number_of:,} {one if number_of == 1 else many or one + 's'}"
