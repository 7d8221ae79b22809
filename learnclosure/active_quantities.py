"""Rows of the table of quantities for what eddies do to the flow itself.

Those on interfaces of layers stand on levels instead where cells stand still.
"""

from __future__ import annotations

from learnclosure.quantities import INTERFACE_FIELD, Quantity

SURFACE_VALUE = ("interface",)
LAYER_VALUE = ("layer",)

_GM = "Gent and McWilliams 1990, J. Phys. Oceanogr. 20, 150-155"
_REDI = "Redi 1982, J. Phys. Oceanogr. 12, 1154-1158"
_BOUND = "Marshall, Maddison and Berloff 2012, J. Phys. Oceanogr. 42, 539-557"
_ENERGY = "Lorenz 1955, Tellus 7, 157-167"


def _coefficients(stem: str, symbol: str, units: str, what: str, source: str) -> list[Quantity]:
    """Rows of a coefficient as a map and of a whole surface, each with its error."""
    error = "standard error by leaving one member out, of the "
    whole = f"{what}, fitted to the whole surface"
    return [
        Quantity(
            stem, symbol, units, what, "statistic", dims=INTERFACE_FIELD, source=source,
            validity="missing where mean gradients do not stand out from their sampling error",
        ),
        Quantity(
            f"{stem}_mean", symbol, units, whole, "statistic", dims=SURFACE_VALUE, source=source,
            locality="domain",
        ),
        Quantity(
            f"{stem}_mean_standard_error", symbol, units, error + whole, "statistic",
            dims=SURFACE_VALUE, source="Efron and Stein 1981, Annals of Statistics 9, 586-596",
            locality="domain",
        ),
    ]  # fmt: skip


def _error_map(stem: str, symbol: str, what: str) -> Quantity:
    return Quantity(
        f"{stem}_standard_error", symbol, "m2 s-1",
        f"standard error by leaving one member out, of the {what}", "statistic",
        dims=INTERFACE_FIELD, source="Efron and Stein 1981, Annals of Statistics 9, 586-596",
    )  # fmt: skip


def _scores(stem: str, what: str, dims: tuple[str, ...]) -> list[Quantity]:
    """Rows of a smooth diffusivity's length, scores and rivals."""
    share = f"coefficient of determination of the flux divergence of {what}, by"
    unseen = "on the half of the members it was not fitted to"
    texts = {
        "skill": f"{share} a smooth diffusivity fitted to it",
        "cross_half_skill": f"{share} a smooth diffusivity, {unseen}",
        "constant_skill": f"{share} one diffusivity fitted to it",
        "constant_cross_half_skill": f"{share} one diffusivity, {unseen}",
        "raw_flux_skill": f"{share} a smooth diffusivity fitted to the flux itself",
        "raw_flux_cross_half_skill": f"{share} a smooth diffusivity fitted to the flux, {unseen}",
    }
    return [
        Quantity(
            f"{stem}_smoothing_length", "l", "m", f"smoothing length of the diffusivity of {what}",
            "statistic", dims=dims, locality="domain",
            source="two-fold cross-validation; Stone 1974, J. Roy. Stat. Soc. B 36, 111-147",
        ),
        Quantity(
            f"{stem}_constant", "k", "m2 s-1",
            f"single diffusivity fitted to the flux divergence of {what}", "statistic",
            dims=dims, locality="domain",
        ),
        *(
            Quantity(
                f"{stem}_{name}", "R2", "1", text, "statistic", dims=dims, locality="domain"
            )
            for name, text in texts.items()
        ),
    ]  # fmt: skip


_ROWS: list[Quantity] = [
    *_coefficients("gm_coefficient", "kG", "m2 s-1", "diffusivity of interface height (GM)", _GM),
    _error_map("gm_coefficient", "kG", "diffusivity of interface height (GM)"),
    *_coefficients("redi_coefficient", "kR", "m2 s-1", "diffusivity of passive tracers", _REDI),
    _error_map("redi_coefficient", "kR", "diffusivity of passive tracers"),
    *_coefficients("redi_gm_ratio", "kR/kG", "1", "Redi over GM coefficient", ""),
    Quantity(
        "interface_diffusivity", "kI", "m2 s-1",
        "smooth diffusivity of interface height fitted to its flux divergence", "statistic",
        dims=INTERFACE_FIELD,
    ),
    *_scores("interface_diffusivity", "interface height", SURFACE_VALUE),
    Quantity(
        "potential_vorticity_diffusivity", "kQ", "m2 s-1",
        "smooth diffusivity of potential vorticity fitted to its flux divergence", "statistic",
    ),
    *_scores("potential_vorticity_diffusivity", "potential vorticity", LAYER_VALUE),
    *(
        Quantity(
            f"potential_vorticity_{of}_{kind}", symbol, "1", text, "statistic",
            dims=LAYER_VALUE, locality="domain",
        )
        for of, what in (("flux", "eddy flux"), ("divergence", "eddy flux divergence"))
        for kind, symbol, text in (
            (
                "skill", "R2", f"coefficient of determination of the {what} of potential "
                "vorticity by the transport tensor of passive tracers",
            ),
            (
                "reliability", "",
                f"split-half reliability of the {what} of potential vorticity",
            ),
        )
    ),
    Quantity(
        "eddy_available_potential_energy", "Pe", "m2 s-2",
        "available potential energy of the eddies per unit mass", "statistic",
        dims=INTERFACE_FIELD, energy=True, source=_ENERGY,
        validity="missing where the squared buoyancy frequency is below 1e-8 s-2",
    ),
    Quantity(
        "baroclinic_conversion", "Cp", "m2 s-3",
        "gain of eddy energy from the potential energy of the mean state", "statistic",
        dims=INTERFACE_FIELD, energy=True, source=_ENERGY,
        validity="missing where the squared buoyancy frequency is below 1e-8 s-2",
    ),
    Quantity(
        "barotropic_conversion", "Ck", "m2 s-3",
        "gain of eddy energy from the kinetic energy of the mean flow", "statistic",
        energy=True, source="Harrison and Robinson 1978, Dyn. Atmos. Oceans 2, 185-210",
    ),
    Quantity(
        "eddy_efficiency", "a", "1",
        "share of the energy bound that the eddy flux down the mean slope reaches",
        "statistic", dims=SURFACE_VALUE, energy=True, source=_BOUND, locality="domain",
    ),
]  # fmt: skip

ACTIVE_STATISTICS: dict[str, Quantity] = {row.name: row for row in _ROWS}
