"""The one declarative table of every physical quantity learnclosure names.

Reading, NetCDF attributes, graph inputs, manifests, the feature listing and the
report all read their units, names and symmetries from here. Adding a quantity is
adding a row.

Parity says what a reflection of one axis (together with a change of sign of the
Coriolis parameter) does to the value: ``scalar`` keeps it, ``pseudo-scalar`` changes
its sign, ``vector`` components transform as a vector, ``pseudo-vector`` as a vector
with one more change of sign, ``tensor`` as a second-order tensor.

Locality says what a host must have at hand to compute the value: ``point``,
``stencil 1`` (one neighbour each way), ``stencil 2``, ``column``, ``along-jet``,
``domain``.
"""

from __future__ import annotations

from learnclosure.feature_quantities import FEATURES
from learnclosure.input_quantities import INPUTS
from learnclosure.quantity import (
    INTERFACE_FIELD,
    LAYER_FIELD,
    SURFACE_FIELD,
    Group,
    Locality,
    Parity,
    Quantity,
)
from learnclosure.quantity import rows as _rows

__all__ = [
    "FEATURES",
    "INPUTS",
    "INTERFACE_FIELD",
    "LAYER_FIELD",
    "MEAN_STATE",
    "OUTPUTS",
    "ROLES",
    "STATISTICS",
    "SURFACE_FIELD",
    "TENSOR_COMPONENTS",
    "Group",
    "Locality",
    "Parity",
    "Quantity",
]

ROLES: dict[str, Quantity] = _rows(
    "role",
    [
        Quantity(
            "x_velocity", "u", "m s-1", "velocity along x", "role", "sea_water_x_velocity",
            parity="vector",
        ),
        Quantity(
            "y_velocity", "v", "m s-1", "velocity along y", "role", "sea_water_y_velocity",
            parity="vector",
        ),
        Quantity("thickness", "h", "m", "layer or cell thickness", "role", "cell_thickness"),
        Quantity(
            "buoyancy", "b", "m s-2", "buoyancy, minus g times the relative density anomaly", "role"
        ),
        Quantity(
            "temperature", "T", "K", "temperature", "role", "sea_water_potential_temperature"
        ),
        Quantity("salinity", "S", "g kg-1", "salinity", "role", "sea_water_absolute_salinity"),
        Quantity(
            "reduced_gravity", "g'", "m s-2", "reduced gravity at the interface below a layer",
            "role", dims=INTERFACE_FIELD,
        ),
    ],
)  # fmt: skip

MEAN_STATE: dict[str, Quantity] = _rows(
    "mean state",
    [
        Quantity(
            "x_velocity", "U", "m s-1", "mean velocity along x", "mean state",
            "sea_water_x_velocity", parity="vector",
        ),
        Quantity(
            "y_velocity", "V", "m s-1", "mean velocity along y", "mean state",
            "sea_water_y_velocity", parity="vector",
        ),
        Quantity(
            "layer_thickness", "H", "m", "mean layer thickness, zero on land", "mean state",
            "cell_thickness",
        ),
        Quantity(
            "reduced_gravity", "g'", "m s-2", "reduced gravity at the interface below a layer",
            "mean state", dims=INTERFACE_FIELD, locality="column",
        ),
        Quantity(
            "coriolis_parameter", "f", "s-1", "Coriolis parameter", "mean state",
            "coriolis_parameter", dims=SURFACE_FIELD, parity="pseudo-scalar",
        ),
        Quantity(
            "planetary_beta_x", "beta_x", "m-1 s-1", "gradient of the Coriolis parameter along x",
            "mean state", dims=SURFACE_FIELD, parity="pseudo-vector",
        ),
        Quantity(
            "planetary_beta_y", "beta_y", "m-1 s-1", "gradient of the Coriolis parameter along y",
            "mean state", dims=SURFACE_FIELD, parity="pseudo-vector",
        ),
        Quantity(
            "sea_floor_depth", "D", "m", "depth of the sea floor below the resting surface",
            "mean state", "sea_floor_depth_below_geoid", dims=SURFACE_FIELD,
        ),
        Quantity(
            "cell_width_x", "dx", "m", "width of the cell along x", "mean state",
            dims=SURFACE_FIELD,
        ),
        Quantity(
            "cell_width_y", "dy", "m", "width of the cell along y", "mean state",
            dims=SURFACE_FIELD,
        ),
        Quantity(
            "wet_share", "w", "1", "share of the cell area that is sea", "mean state",
        ),
        Quantity(
            "eddy_kinetic_energy", "EKE", "m2 s-2",
            "kinetic energy of the eddies per unit mass", "mean state", energy=True,
            source="unbiased (N-1) half sum of the velocity variances",
        ),
    ],
)  # fmt: skip

STATISTICS: dict[str, Quantity] = _rows(
    "statistic",
    [
        *(
            Quantity(
                f"transport_tensor_{row}{column}", f"K{row}{column}", "m2 s-1",
                f"eddy transport tensor, flux along {row} down the gradient along {column}",
                "statistic", parity="tensor",
                source="J = -K grad C; Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327",
            )
            for row in "xy"
            for column in "xy"
        ),
        *(
            Quantity(
                f"least_squares_tensor_{row}{column}", f"K{row}{column}", "m2 s-1",
                f"eddy transport tensor by plain least squares in each cell, "
                f"flux along {row} down the gradient along {column}",
                "statistic", parity="tensor",
                source="J = -K grad C; Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327",
            )
            for row in "xy"
            for column in "xy"
        ),
        *(
            Quantity(
                f"symmetric_tensor_{pair}", f"S{pair}", "m2 s-1",
                f"symmetric part of the eddy transport tensor, {pair} component", "statistic",
                parity="tensor",
            )
            for pair in ("xx", "xy", "yy")
        ),
        Quantity(
            "antisymmetric_tensor", "alpha", "m2 s-1",
            "antisymmetric part of the eddy transport tensor, half of Kyx minus Kxy", "statistic",
            parity="pseudo-scalar",
            source="half of Kyx minus Kxy; defined up to a constant as a transport",
        ),
        Quantity(
            "scalar_diffusivity", "k", "m2 s-1",
            "scalar diffusivity that best fits the eddy fluxes of the cell", "statistic",
        ),
        Quantity(
            "condition_number", "cond", "1",
            "condition number of the matrix of weighted mean tracer gradients", "statistic",
            source="ratio of singular values; cot(angle/2) for two unit gradients",
        ),
        Quantity(
            "valid", "", "1", "1 where the transport tensor is determined by the data",
            "statistic",
        ),
    ],
)  # fmt: skip

DEPTH_STATISTICS: dict[str, Quantity] = _rows(
    "statistic",
    [
        *(
            Quantity(
                f"{prefix}depth_tensor_{row}{column}", f"K{row}{column}", "m2 s-1",
                f"eddy transport tensor in depth axes{how}, flux along {row} down the gradient "
                f"along {column}", "statistic", parity="tensor", locality="column",
                source="J = -K grad C; Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327; the "
                "horizontal block is the isoneutral tensor in the small-slope form",
            )
            for prefix, how in (
                ("", ""), ("least_squares_", " by plain least squares in each cell"),
            )
            for row in "xyz"
            for column in "xyz"
        ),
        Quantity(
            "depth_condition_number", "cond", "1",
            "condition number of the matrix of weighted and stretched mean tracer gradients",
            "statistic",
        ),
        *(
            Quantity(
                f"isoneutral_slope_{axis}", f"S{axis}", "1",
                f"slope along {axis} of isoneutral surfaces or of the middle of the layer",
                "statistic", parity="vector", locality="column",
                validity="missing where the column is less stable than N2 = 1e-8 s-2",
            )
            for axis in "xy"
        ),
        Quantity(
            "skew_diffusivity", "kGM", "m2 s-1",
            "coefficient of Gent and McWilliams that best fits the antisymmetric part of the "
            "tensor in depth axes", "statistic", locality="column",
            source="Griffies 1998, J. Phys. Oceanogr. 28, 831-841",
        ),
        Quantity(
            "valid_share", "", "1",
            "share of members and times in which the layer is there", "statistic",
        ),
    ],
)  # fmt: skip
"""Statistics only some ensembles allow: of levels with upward velocity and of layers."""

TENSOR_COMPONENTS: tuple[str, ...] = tuple(
    f"transport_tensor_{row}{column}" for row in "xy" for column in "xy"
)

OUTPUTS: dict[str, Quantity] = _rows(
    "output",
    [
        *(
            Quantity(
                name, STATISTICS[name].symbol, "m2 s-1", STATISTICS[name].long_name, "output",
                parity="tensor", source=STATISTICS[name].source,
            )
            for name in TENSOR_COMPONENTS
        ),
        *(
            Quantity(
                f"half_width_{row}{column}", f"hK{row}{column}", "m2 s-1",
                f"half-width of the interval about the transport tensor, component {row}{column}",
                "output", validity="1e30 or more where none was calibrated",
            )
            for row in "xy"
            for column in "xy"
        ),
        Quantity(
            "trust", "", "1", "1 within the range a closure was trained on, falling to 0 outside",
            "output",
        ),
    ],
)  # fmt: skip
