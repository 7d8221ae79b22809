"""Turning results into JSON-safe data that is the same wherever it is made."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

import numpy as np

DIGITS = 6


def plain(value: Any) -> Any:
    """Return a value as JSON-safe data with floats of six significant digits.

    Parameters
    ----------
    value : mapping, sequence, number, string, bool or None
        Arrays and NumPy scalars as well.

    Returns
    -------
    dict, list, float, int, str, bool or None
        Numbers that are not finite become None.

    Examples
    --------
    >>> plain({"r2": (0.123456789, float("nan")), "points": 3})
    {'r2': [0.123457, None], 'points': 3}
    """
    if isinstance(value, Mapping):
        return {str(key): plain(item) for key, item in value.items()}
    if isinstance(value, (list, tuple, np.ndarray)):
        return [plain(item) for item in value]
    if isinstance(value, (bool, np.bool_)):
        return bool(value)
    if isinstance(value, (int, np.integer)):
        return int(value)
    if isinstance(value, (float, np.floating)):
        number = float(value)
        return float(f"{number:.{DIGITS}g}") if math.isfinite(number) else None
    if value is None or isinstance(value, str):
        return value
    raise TypeError(f"no plain form of {type(value).__name__}")
