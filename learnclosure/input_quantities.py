"""Physical inputs of a closure, which whoever runs it computes."""

from __future__ import annotations

from learnclosure.quantity import Quantity, rows

INPUTS: dict[str, Quantity] = rows(
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
                f"shear_rate_{axis}", f"d{axis}u/dz", "s-1",
                f"vertical derivative of the mean velocity along {axis}, mean over the "
                "interfaces of the layer",
                "input", parity="vector", locality="column",
                validity="zero for a single layer",
            )
            for axis in "xy"
        ),
        *(
            Quantity(
                f"column_velocity_{axis}", f"u{axis} mean", "m s-1",
                f"mean velocity along {axis} averaged over the column", "input",
                parity="vector", locality="column",
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
                f"vorticity_gradient_{axis}", f"dzeta/d{axis}", "m-1 s-1",
                f"gradient along {axis} of relative vorticity", "input",
                parity="pseudo-vector", locality="stencil 2",
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
        *(
            Quantity(
                f"topographic_slope_{axis}", f"dD/d{axis}", "1",
                f"gradient along {axis} of the depth of the sea floor", "input",
                parity="vector", locality="stencil 1",
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
            "second_deformation_radius", "L2", "m", "second baroclinic deformation radius",
            "input", locality="column",
            validity="at most 500 km; zero with fewer than two interfaces",
            source="Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460",
        ),
        Quantity(
            "wkb_deformation_radius", "Lwkb", "m",
            "first baroclinic deformation radius in the WKB approximation, int N dz/(pi f)",
            "input", locality="column", validity="as the deformation radius",
            source="Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460",
        ),
        Quantity(
            "mode_amplitude", "p1", "1",
            "first baroclinic mode of pressure in the layer, of unit mean square over the column",
            "input", locality="column",
            validity="positive at the top; zero for a single layer",
            source="Gill 1982, Atmosphere-Ocean Dynamics, section 6.11 (from memory)",
        ),
        Quantity(
            "buoyancy_frequency_squared", "N2", "s-2",
            "square of the buoyancy frequency, mean over the interfaces of the layer", "input",
            "square_of_brunt_vaisala_frequency_in_sea_water", locality="column",
            validity="at least 1e-8 s-2, also for a single layer",
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
            "phillips_criticality", "xi", "1",
            "shear across an interface over the least that is unstable by the criterion of "
            "Phillips, largest of the column",
            "input", locality="column",
            validity="above 1 the gradients of potential vorticity by beta and shear oppose "
            "each other; at most 100, which also stands for shear without beta",
            source="Phillips 1954, Tellus 6, 273-286; Pedlosky 1987, section 7.11 (from memory)",
        ),
        Quantity(
            "pv_gradient_reversal", "min cos", "1",
            "least cosine of the angle between the potential vorticity gradients of the layer "
            "and of any other in the column",
            "input", locality="column",
            validity="below zero where they oppose each other; 1 where undefined",
            source="Charney and Stern 1962, J. Atmos. Sci. 19, 159-172 (from memory)",
        ),
        Quantity(
            "jet_distance", "d/W", "1",
            "distance from the jet axis of the section in jet widths, positive to the left of "
            "the flow", "input", parity="pseudo-scalar", locality="along-jet",
            validity="between -10 and 10; zero where there is no jet",
        ),
        Quantity("jet_speed", "Uj", "m s-1", "speed on the jet axis of the section", "input",
                 locality="along-jet"),
        Quantity("jet_width", "W", "m", "width of the jet in the section, W of exp(-(d/W)^2)",
                 "input", locality="along-jet"),
        Quantity(
            "axis_distance", "d/W", "1",
            "distance from the nearest jet axis in jet widths, positive to the left of the flow",
            "input", parity="pseudo-scalar", locality="along-jet",
            validity="between -10 and 10; zero where there is no jet",
        ),
        Quantity("axis_speed", "Uj", "m s-1", "speed on the nearest jet axis", "input",
                 locality="along-jet", validity="zero where there is no jet"),
        Quantity("axis_width", "W", "m", "width of the nearest jet, W of exp(-(d/W)^2)", "input",
                 locality="along-jet",
                 validity="the deformation radius where there is no jet"),
        *(
            Quantity(
                f"axis_direction_{axis}", f"a{axis}", "1",
                f"direction along {axis} of the flow on the nearest jet axis, a unit vector",
                "input", parity="vector", locality="along-jet",
                validity="zero where there is no jet",
            )
            for axis in "xy"
        ),
        Quantity("axis_presence", "", "1", "1 where there is a jet to be near to, else 0",
                 "input", locality="along-jet"),
        Quantity("along_axis_distance", "s/W", "1",
                 "distance downstream of where the nearest jet is fastest, in jet widths",
                 "input", locality="along-jet",
                 validity="between -100 and 100; zero where there is no jet"),
        Quantity("layer_index", "k", "1", "number of the layer, zero at the top", "input"),
        Quantity("depth_share", "z/D", "1",
                 "depth of the middle of the layer over the depth of the column", "input",
                 locality="column"),
        Quantity("thickness_share", "H/D", "1",
                 "thickness of the layer over the depth of the column", "input",
                 locality="column"),
        Quantity("land_distance", "dl", "m", "distance to the nearest coast or wall", "input",
                 locality="domain", validity="at most 1e7 m, which also stands for no land"),
        Quantity("cell_width", "dx", "m", "side of a square of the area of the cell", "input"),
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
