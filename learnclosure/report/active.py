"""Rows of the report's table on what eddies do to the flow itself."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import xarray as xr

from learnclosure.report.tables import MISSING, MOST_LAYERS, layers

VERDICTS = "; "
"""What separates the layers' verdicts in the attributes of the statistics."""


def _values(data: xr.Dataset, name: str) -> list[float] | None:
    return np.asarray(data[name].values, dtype=float).tolist() if name in data else None


def _with_error(data: xr.Dataset, name: str, digits: int) -> str:
    values, errors = _values(data, name), _values(data, f"{name}_standard_error")
    if values is None or errors is None:
        return MISSING
    if len(values) > MOST_LAYERS:
        return layers(values, digits)
    return " / ".join(
        MISSING if not np.isfinite(value) else f"{value:.{digits}f} ± {error:.{digits}f}"
        for value, error in zip(values, errors, strict=True)
    )


def _fit(data: xr.Dataset, stem: str) -> str:
    """Write skill, the same on unseen members, and both for a constant."""
    columns = [
        _values(data, f"{stem}_{ending}")
        for ending in (
            "skill", "cross_half_skill", "constant_skill", "constant_cross_half_skill",
        )
    ]  # fmt: skip
    if any(column is None for column in columns):
        return MISSING
    own, unseen, constant, constant_unseen = (layers(column) for column in columns)
    return f"{own} (unseen half {unseen}); constant {constant} ({constant_unseen})"


def _verdict(data: xr.Dataset, of: str) -> str:
    skill = _values(data, f"potential_vorticity_{of}_skill")
    if skill is None:
        return MISSING
    words = str(data.attrs[f"potential_vorticity_{of}_verdict"]).split(VERDICTS)
    if len(words) > MOST_LAYERS:
        carried = sum(word == "carries" for word in words)
        return f"carries it in {carried} of {len(words)} layers (R2 {layers(skill)})"
    return f"{' / '.join(words)} (R2 {layers(skill)})"


def active_rows(statistics: Mapping[str, xr.Dataset]) -> list[list[str]]:
    """Tabulate GM and Redi coefficients, verdicts, smooth diffusivities and the bound.

    Parameters
    ----------
    statistics : mapping of str to xarray.Dataset
        Statistics by region.

    Returns
    -------
    list of list of str
        For each region that has an active side: region, GM coefficient, Redi coefficient,
        their ratio, verdicts on flux and flux divergence of potential vorticity, fits to the
        flux divergence of interface height or buoyancy and of potential vorticity, and
        violations of the energy bound.
    """
    return [
        [
            region,
            _with_error(data, "gm_coefficient_mean", 0),
            _with_error(data, "redi_coefficient_mean", 0),
            _with_error(data, "redi_gm_ratio_mean", 2),
            _verdict(data, "flux"),
            _verdict(data, "divergence"),
            _fit(data, "interface_diffusivity"),
            _fit(data, "potential_vorticity_diffusivity"),
            str(int(data.attrs["energy_bound_violations"])),
        ]
        for region, data in statistics.items()
        if "energy_bound_violations" in data.attrs
    ]
