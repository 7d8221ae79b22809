"""What one row of the table of quantities says."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

Parity = Literal["scalar", "pseudo-scalar", "vector", "pseudo-vector", "tensor"]
Locality = Literal["point", "stencil 1", "stencil 2", "column", "along-jet", "domain"]
Group = Literal["role", "mean state", "statistic", "input", "feature", "output"]
Topic = Literal[
    "",
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
"""Kinds of physics features are grouped by."""

LAYER_FIELD = ("layer", "y", "x")
SURFACE_FIELD = ("y", "x")
INTERFACE_FIELD = ("interface", "y", "x")


@dataclass(frozen=True, slots=True)
class Quantity:
    """One row of the table.

    Attributes
    ----------
    name : str
        Identifier in artefacts, graph inputs and Python.
    symbol : str
        Usual symbol in plain text.
    units : str
        SI units in UDUNITS spelling; ``1`` for a pure number.
    long_name : str
        NetCDF ``long_name``.
    group : str
        Where in the work it belongs; see ``Group``.
    standard_name : str or None
        CF standard name where one exists.
    dims : tuple of str
        Dimensions it has in artefacts.
    parity : str
        Behaviour under reflection.
    locality : str
        What a host needs to compute it.
    energy : bool
        True where it needs eddy energy and so only serves hosts that carry it.
    validity : str
        Where it is defined; what stands in elsewhere.
    source : str
        Published source of the definition.
    topic : str
        Kind of physics, of features; see ``Topic``.
    standard : bool
        Whether closures use the feature unless a study says otherwise.
    """

    name: str
    symbol: str
    units: str
    long_name: str
    group: Group
    standard_name: str | None = None
    dims: tuple[str, ...] = LAYER_FIELD
    parity: Parity = "scalar"
    locality: Locality = "point"
    energy: bool = False
    validity: str = ""
    source: str = ""
    topic: Topic = ""
    standard: bool = False

    def attributes(self) -> dict[str, str]:
        """Return the CF attributes a NetCDF variable of this quantity carries."""
        attributes = {"long_name": self.long_name, "units": self.units}
        if self.standard_name is not None:
            attributes["standard_name"] = self.standard_name
        return attributes


def rows(group: Group, entries: Iterable[Quantity]) -> dict[str, Quantity]:
    """Collect the rows of one group by name.

    Parameters
    ----------
    group : str
        Group every row must stand in.
    entries : iterable of Quantity

    Returns
    -------
    dict of str to Quantity
        In the order given.

    Raises
    ------
    AssertionError
        If a row stands in another group or a name stands twice.
    """
    table: dict[str, Quantity] = {}
    for row in entries:
        if row.group != group:
            raise AssertionError(f"row {row.name} stands in the wrong group")
        if row.name in table:
            raise AssertionError(f"row {row.name} stands twice")
        table[row.name] = row
    return table
