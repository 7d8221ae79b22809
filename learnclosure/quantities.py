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

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Literal

Parity = Literal["scalar", "pseudo-scalar", "vector", "pseudo-vector", "tensor"]
Locality = Literal["point", "stencil 1", "stencil 2", "column", "along-jet", "domain"]
Group = Literal["role", "mean state", "statistic", "input", "feature", "output"]

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

    def attributes(self) -> dict[str, str]:
        """Return the CF attributes a NetCDF variable of this quantity carries."""
        attributes = {"long_name": self.long_name, "units": self.units}
        if self.standard_name is not None:
            attributes["standard_name"] = self.standard_name
        return attributes


def _rows(group: Group, rows: Iterable[Quantity]) -> dict[str, Quantity]:
    table: dict[str, Quantity] = {}
    for row in rows:
        if row.group != group:
            raise AssertionError(f"row {row.name} stands in the wrong group")
        if row.name in table:
            raise AssertionError(f"row {row.name} stands twice")
        table[row.name] = row
    return table


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

INPUTS: dict[str, Quantity] = _rows(
    "input",
    [
        Quantity("x_velocity", "u", "m s-1", "mean velocity along x", "input",
                 "sea_water_x_velocity", parity="vector"),
        Quantity("y_velocity", "v", "m s-1", "mean velocity along y", "input",
                 "sea_water_y_velocity", parity="vector"),
        *(
            Quantity(
                f"velocity_gradient_{row}{column}", f"d{component}/d{column}", "s-1",
                f"gradient along {column} of the mean velocity along {row}", "input",
                parity="tensor", locality="stencil 1",
            )
            for row, component in (("x", "u"), ("y", "v"))
            for column in "xy"
        ),
        *(
            Quantity(
                f"shear_{axis}", f"d{axis}u", "m s-1",
                f"mean velocity along {axis} above minus below the interfaces of the layer",
                "input", parity="vector", locality="column",
                validity="zero for a single layer",
            )
            for axis in "xy"
        ),
        *(
            Quantity(
                f"pv_gradient_{axis}", f"dq/d{axis}", "m-1 s-1",
                f"gradient along {axis} of quasi-geostrophic potential vorticity", "input",
                parity="pseudo-vector", locality="stencil 2",
                validity="neutral interfaces count as N2 = 1e-8 s-2",
                source="Pedlosky 1987, Geophysical Fluid Dynamics, section 6.16 (from memory)",
            )
            for axis in "xy"
        ),
        *(
            Quantity(
                f"planetary_beta_{axis}", f"df/d{axis}", "m-1 s-1",
                f"gradient along {axis} of the Coriolis parameter", "input",
                parity="pseudo-vector",
            )
            for axis in "xy"
        ),
        *(
            Quantity(
                f"topographic_beta_{axis}", f"-f/D dD/d{axis}", "m-1 s-1",
                f"topographic beta along {axis} of the whole column", "input",
                parity="pseudo-vector", locality="stencil 1",
                source="Rhines 1969, J. Fluid Mech. 37, 161-189 (from memory)",
            )
            for axis in "xy"
        ),
        Quantity("coriolis_parameter", "f", "s-1", "Coriolis parameter", "input",
                 "coriolis_parameter", parity="pseudo-scalar"),
        Quantity(
            "deformation_radius", "Ld", "m", "first baroclinic deformation radius", "input",
            locality="column",
            validity="between 1 and 500 km; sqrt(c/(2 beta)) near the equator",
            source="Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460",
        ),
        Quantity(
            "eady_growth_rate", "sigma", "s-1", "Eady growth rate of the column", "input",
            locality="column", validity="zero for a single layer",
            source="Eady 1949, Tellus 1, 33-52: 0.3098 f U_z / N",
        ),
        Quantity(
            "charney_green_number", "gamma", "1", "Charney-Green number beta N2 H / (f2 U_z)",
            "input", locality="column", validity="at most 100, also without shear",
            source="Green 1960, Q. J. R. Meteorol. Soc. 86, 237-251 (from memory)",
        ),
        Quantity(
            "jet_distance", "d/W", "1",
            "distance from the jet axis in jet widths, positive to the left of the flow",
            "input", parity="pseudo-scalar", locality="along-jet",
            validity="between -10 and 10; zero where there is no jet",
        ),
        Quantity("jet_speed", "Uj", "m s-1", "speed on the jet axis", "input",
                 locality="along-jet"),
        Quantity("jet_width", "W", "m", "width of the jet, W of exp(-(d/W)^2)", "input",
                 locality="along-jet"),
        Quantity("layer_index", "k", "1", "number of the layer, zero at the top", "input"),
        Quantity("depth_share", "z/D", "1",
                 "depth of the middle of the layer over the depth of the column", "input",
                 locality="column"),
        Quantity("eddy_kinetic_energy", "EKE", "m2 s-2",
                 "kinetic energy of the eddies per unit mass", "input", energy=True),
        Quantity("eddy_kinetic_energy_column", "EKEc", "m2 s-2",
                 "eddy kinetic energy per unit mass, mean over the column", "input",
                 energy=True, locality="column"),
        *(
            Quantity(
                f"eddy_energy_gradient_{axis}", f"d ln EKE/d{axis}", "m-1",
                f"gradient along {axis} of the logarithm of eddy kinetic energy", "input",
                parity="vector", energy=True, locality="stencil 1",
                validity="eddy kinetic energy counts as at least 1e-8 m2 s-2",
            )
            for axis in "xy"
        ),
    ],
)  # fmt: skip

_DRIFT = "velocity over beta Ld2, the drift of long Rossby waves"

FEATURES: dict[str, Quantity] = _rows(
    "feature",
    [
        Quantity("speed", "|U|", "m s-1", "speed of the mean flow", "feature"),
        Quantity("vertical_shear", "|dU|", "m s-1", "shear between layers", "feature",
                 locality="column"),
        Quantity("pv_gradient", "|grad q|", "m-1 s-1",
                 "size of the potential vorticity gradient", "feature", locality="stencil 2"),
        Quantity("deformation_radius", "Ld", "m", "first baroclinic deformation radius",
                 "feature", locality="column",
                 source="Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460"),
        Quantity("eady_growth_rate", "sigma", "s-1", "Eady growth rate of the column",
                 "feature", locality="column", source="Eady 1949, Tellus 1, 33-52"),
        Quantity("eady_diffusivity", "sigma Ld2", "m2 s-1",
                 "Eady growth rate times deformation radius squared", "feature",
                 locality="column", source="Stone 1972, J. Atmos. Sci. 29, 405-418"),
        Quantity("shear_diffusivity", "|dU| Ld", "m2 s-1",
                 "shear between layers times deformation radius", "feature",
                 locality="column"),
        Quantity("flow_across_ratio", "Un/(beta Ld2)", "1",
                 "flow along the potential vorticity gradient, " + _DRIFT, "feature"),
        Quantity("flow_along_ratio", "Ut/(beta Ld2)", "1",
                 "flow along potential vorticity contours, " + _DRIFT, "feature"),
        Quantity("shear_across_ratio", "dUn/(beta Ld2)", "1",
                 "shear along the potential vorticity gradient, " + _DRIFT, "feature",
                 locality="column"),
        Quantity("shear_along_ratio", "dUt/(beta Ld2)", "1",
                 "shear along potential vorticity contours, " + _DRIFT, "feature",
                 locality="column", source="criticality of Phillips 1954, Tellus 6, 273-286"),
        Quantity("rossby_number", "zeta/f", "1", "relative vorticity over f", "feature",
                 locality="stencil 1"),
        Quantity("normal_strain_ratio", "sn/|f|", "1",
                 "normal strain in the local frame over f", "feature", locality="stencil 1"),
        Quantity("shear_strain_ratio", "ss/|f|", "1",
                 "shear strain in the local frame over f", "feature", locality="stencil 1"),
        Quantity("okubo_weiss_ratio", "OW/f2", "1", "Okubo-Weiss parameter over f squared",
                 "feature", locality="stencil 1",
                 source="Okubo 1970, Deep-Sea Res. 17, 445-454; Weiss 1991, Physica D 48, 273"),
        Quantity("pv_gradient_ratio", "|grad q|/beta", "1",
                 "potential vorticity gradient over planetary beta", "feature",
                 locality="stencil 2"),
        Quantity("planetary_beta_across", "beta_n/(|grad q| + beta)", "1",
                 "planetary beta along grad q, over the sum of both sizes",
                 "feature", locality="stencil 2"),
        Quantity("planetary_beta_along", "beta_t/(|grad q| + beta)", "1",
                 "planetary beta along contours of q, over the sum of both sizes",
                 "feature", locality="stencil 2"),
        Quantity("topographic_beta_across", "betaT_n/beta", "1",
                 "topographic beta along the potential vorticity gradient, over planetary beta",
                 "feature", locality="stencil 2"),
        Quantity("topographic_beta_along", "betaT_t/beta", "1",
                 "topographic beta along potential vorticity contours, over planetary beta",
                 "feature", locality="stencil 2"),
        Quantity("charney_green_number", "gamma", "1", "Charney-Green number", "feature",
                 locality="column"),
        Quantity("jet_distance", "d/W", "1",
                 "signed distance from the jet axis in jet widths, mirrored in the south",
                 "feature", locality="along-jet"),
        Quantity("jet_width_ratio", "W/Ld", "1", "jet width over deformation radius",
                 "feature", locality="along-jet"),
        Quantity("jet_speed_ratio", "Uj/(beta Ld2)", "1", "jet speed, " + _DRIFT, "feature",
                 locality="along-jet"),
        Quantity("layer_index", "k", "1", "number of the layer, zero at the top", "feature"),
        Quantity("depth_share", "z/D", "1",
                 "depth of the middle of the layer over the depth of the column", "feature",
                 locality="column"),
        Quantity("eddy_speed_share", "ue/uc", "1",
                 "eddy speed of the layer over that of the column", "feature", energy=True),
        Quantity("flow_across_eddy_ratio", "Un/ue", "1",
                 "flow along the potential vorticity gradient over eddy speed", "feature",
                 energy=True),
        Quantity("flow_along_eddy_ratio", "Ut/ue", "1",
                 "flow along potential vorticity contours over eddy speed", "feature",
                 energy=True),
        Quantity("eddy_energy_gradient_across", "Ld dn ln EKE", "1",
                 "gradient of log eddy energy along that of potential vorticity, times Ld",
                 "feature", energy=True, locality="stencil 2"),
        Quantity("eddy_energy_gradient_along", "Ld dt ln EKE", "1",
                 "gradient of log eddy energy along potential vorticity contours, times Ld",
                 "feature", energy=True, locality="stencil 2"),
        Quantity("rhines_length_ratio", "LR/Ld", "1",
                 "Rhines length of the column over deformation radius", "feature", energy=True,
                 locality="column", source="Rhines 1975, J. Fluid Mech. 69, 417-443"),
        Quantity("eddy_rossby_number", "uc/(|f| Ld)", "1",
                 "eddy speed of the column over f times deformation radius", "feature",
                 energy=True, locality="column"),
        Quantity("eady_growth_ratio", "sigma Ld/uc", "1",
                 "Eady growth rate times deformation radius over eddy speed of the column",
                 "feature", energy=True, locality="column"),
    ],
)  # fmt: skip


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
