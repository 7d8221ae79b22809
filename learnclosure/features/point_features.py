"""Features of a closure from its inputs at a point, written once for NumPy and the graph.

Closures of the mean field see dimensional amplitudes, since nothing else tells them how
strong the eddies are. Closures that are given eddy energy learn a tensor without
dimension and see pure numbers only.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Literal, get_args

from learnclosure.features import point_column, point_energy, point_gradients, point_place
from learnclosure.features.frames import Frame
from learnclosure.features.point import FUNCTIONS, Point
from learnclosure.quantities import FEATURES, Quantity

FeatureGroup = Literal[
    "standard",
    "gradients",
    "shear",
    "stratification",
    "instability",
    "topography",
    "jet",
    "vertical",
    "boundaries",
    "resolution",
    "eddy-energy",
]
"""``standard``, or all features of one kind of physics."""

CATALOGUE = (point_gradients, point_column, point_place, point_energy)
"""Modules whose functions are registered by being imported."""
STANDARD: tuple[FeatureGroup, ...] = ("standard",)
EVERY_GROUP: tuple[FeatureGroup, ...] = get_args(FeatureGroup)


def chosen_features(energy: bool, groups: Sequence[FeatureGroup] = STANDARD) -> list[Quantity]:
    """Choose the features of a closure.

    Parameters
    ----------
    energy : bool
        Whether the closure is given eddy energy. If so, features that need it take the
        place of dimensional amplitudes.
    groups : sequence of str, optional
        Groups to take together.

    Returns
    -------
    list of Quantity
        Rows of ``quantities.FEATURES``, in their order.
    """
    return [
        row
        for row in FEATURES.values()
        if ((row.standard and "standard" in groups) or row.topic in groups)
        and (row.units == "1" if energy else not row.energy)
    ]


def point_features(
    xp: Any,
    inputs: Mapping[str, Any],
    energy: bool,
    groups: Sequence[FeatureGroup] = STANDARD,
    frame: Frame = "pv-gradient",
) -> dict[str, Any]:
    """Compute the features of a closure.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array
        Rows of ``quantities.INPUTS`` in SI units; only those the features need.
    energy : bool
        Whether the closure is given eddy energy. If so, features that need it take the
        place of dimensional amplitudes.
    groups : sequence of str, optional
        Groups of features to take together.
    frame : {"pv-gradient", "flow", "jet", "fixed"}, optional
        Local frame.

    Returns
    -------
    dict of str to array
        Named as the rows of ``quantities.FEATURES``, in their order.
    """
    point = Point(xp, inputs, frame)
    return {row.name: FUNCTIONS[row.name](point) for row in chosen_features(energy, groups)}


def feature_table() -> list[Quantity]:
    """Return the rows of all features, in order."""
    return list(FEATURES.values())
