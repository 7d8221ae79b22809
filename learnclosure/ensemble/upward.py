"""Upward velocity at the centres of cells or on their upper and lower faces."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.errors import GridError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

VERTICAL_FACES = ("top", "bottom")


def check_upward(
    face: str | None, own: xr.DataArray, tracer: xr.DataArray, layer: str | None, where: object
) -> None:
    """Refuse an upward velocity that sits elsewhere than the study says.

    Parameters
    ----------
    face : str or None
        Face it sits on; centre if None.
    own, tracer : xarray.DataArray
        The upward velocity and the first tracer.
    layer : str or None
        Vertical dimension of the tracer.
    where : object
        File, for the message.

    Raises
    ------
    GridError
        If its dimensions or their lengths do not fit the cells.
    """
    if face not in VERTICAL_FACES:
        if own.dims != tracer.dims:
            raise GridError(
                "the upward velocity sits on other points than the tracers",
                where=f"{where}: {own.name}",
                found=f"({', '.join(str(dim) for dim in own.dims)})",
                expected=f"({', '.join(str(dim) for dim in tracer.dims)}), or its face",
                remedy='name faces = { z_velocity = "top" } or "bottom" under [ensemble.grid]',
            )
        return
    allowed = [tracer.sizes[dim] for dim in tracer.dims]
    place = tracer.dims.index(layer) if layer is not None else None
    fits = own.ndim == tracer.ndim and all(
        size == allowed[axis] or (axis == place and size == allowed[axis] + 1)
        for axis, size in enumerate(own.shape)
    )
    if place is None or not fits or own.dims[-2:] != tracer.dims[-2:]:
        raise GridError(
            "the upward velocity does not fit the cells of the tracers",
            where=f"{where}: {own.name}",
            found=f"{dict(own.sizes)}",
            expected=f"{dict(tracer.sizes)}, or one more along the vertical",
            remedy="check which variable is named, and its face under [ensemble.grid]",
        )


def upward_notes(face: str | None) -> list[str]:
    """Say what is assumed of an upward velocity.

    Parameters
    ----------
    face : str or None

    Returns
    -------
    list of str
    """
    if face not in VERTICAL_FACES:
        return []
    missing = "sea floor" if face == "top" else "surface"
    return [
        "upward velocity at centres is the mean of the two faces of a cell, zero where a face is "
        f"land; where the files leave out the {missing}, it is zero there"
    ]


def _above(mask: BoolArray) -> BoolArray:
    """Tell which cells have sea above them."""
    shifted = np.zeros_like(mask)
    shifted[1:] = mask[:-1]
    return shifted


def needed_faces(mask: BoolArray, face: str | None, points: int) -> BoolArray:
    """Tell where the upward velocity must be known.

    Parameters
    ----------
    mask : ndarray of bool, shape (layer, y, x)
        True in the sea, the top layer first.
    face : str or None
    points : int
        Number of values along the vertical: as many as cells, or one more.

    Returns
    -------
    ndarray of bool, shape (points, y, x)
    """
    if face not in VERTICAL_FACES:
        return mask
    inner_top = mask & _above(mask)
    if points == len(mask) + 1:
        return np.concatenate([inner_top, np.zeros_like(mask[:1])])
    if face == "top":
        return inner_top
    inner_bottom = np.zeros_like(mask)
    inner_bottom[:-1] = inner_top[1:]
    return inner_bottom


def upward_at_centres(values: FloatArray, face: str | None, mask: BoolArray) -> FloatArray:
    """Bring an upward velocity from the faces of cells to their centres.

    Parameters
    ----------
    values : ndarray, shape (points, y, x)
        The top one first; not finite on land.
    face : {"top", "bottom"} or None
        Face of the cell with the same index; None or ``"center"`` leaves values as they are.
    mask : ndarray of bool, shape (layer, y, x)

    Returns
    -------
    ndarray, shape (layer, y, x)
    """
    clean = np.nan_to_num(values, nan=0.0, posinf=0.0, neginf=0.0)
    if face not in VERTICAL_FACES:
        return clean
    if len(clean) == len(mask) + 1:
        faces = clean
    else:
        closed = np.zeros_like(clean[:1])
        faces = np.concatenate([clean, closed] if face == "top" else [closed, clean])
    # What files hold on the face between sea and sea floor is not flow of the sea.
    floor = np.concatenate([np.zeros_like(mask[:1]), mask & ~_below(mask)])
    faces = np.where(floor, 0.0, faces)
    return np.asarray(0.5 * (faces[:-1] + faces[1:]))


def _below(mask: BoolArray) -> BoolArray:
    """Tell which cells have sea below them."""
    shifted = np.zeros_like(mask)
    shifted[:-1] = mask[1:]
    return shifted
