"""How inner loops are compiled."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar, cast

import numba

P = ParamSpec("P")
R = TypeVar("R")


def _options(reorder: bool) -> dict[str, Any]:
    common = {"error_model": "numpy", "nogil": True}
    return {"fastmath": True, **common} if reorder else common


def compiled(*, reorder: bool = False) -> Callable[[Callable[P, R]], Callable[P, R]]:
    """Compile a kernel, keeping the machine code on disk wherever a cache can be written.

    Parameters
    ----------
    reorder : bool, optional
        Whether the compiler may reorder and fuse operations, for which all numbers must be
        finite; otherwise rounding is what the code says.

    Returns
    -------
    callable
        The decorator.
    """

    def decorate(function: Callable[P, R]) -> Callable[P, R]:
        options = _options(reorder)
        try:
            return cast("Callable[P, R]", numba.njit(cache=True, **options)(function))
        except RuntimeError:
            # Raised where neither the package nor the user's cache folder can be written to.
            return cast("Callable[P, R]", numba.njit(**options)(function))

    return decorate


def part_of_kernel(*, reorder: bool = False) -> Callable[[Callable[P, R]], Callable[P, R]]:
    """Let kernels take a function in as if it were written out in them.

    As machine code of its own it would be bound to a kernel in one way when that is
    compiled and in another when that is read from disk, and rounding would differ.

    Parameters
    ----------
    reorder : bool, optional
        As for ``compiled``.

    Returns
    -------
    callable
        The decorator.
    """

    def decorate(function: Callable[P, R]) -> Callable[P, R]:
        return cast("Callable[P, R]", numba.njit(inline="always", **_options(reorder))(function))

    return decorate
