"""Numbers in JSON of another's making."""

from __future__ import annotations

import math


def finite_number(value: object) -> float | None:
    """Return a JSON number as a float.

    Parameters
    ----------
    value : object

    Returns
    -------
    float or None
        None if it is anything but a finite number.
    """
    if isinstance(value, bool) or not isinstance(value, (int, float)):
        return None
    try:
        number = float(value)
    except OverflowError:
        return None
    return number if math.isfinite(number) else None


def number_pair(value: object) -> tuple[float, float] | None:
    """Return a JSON list of two ordered finite numbers.

    Parameters
    ----------
    value : object

    Returns
    -------
    tuple of two float, or None
        None if it is anything else.

    Examples
    --------
    >>> number_pair([0, 2.5]), number_pair([2, 1]), number_pair("ab")
    ((0.0, 2.5), None, None)
    """
    if not isinstance(value, list) or len(value) != 2:
        return None
    low, high = finite_number(value[0]), finite_number(value[1])
    return (low, high) if low is not None and high is not None and low <= high else None
