"""Classical closures as estimators: what a learned closure has to beat.

Every baseline is isotropic, ``K = k I``, and comes in two versions: with the published
constant, and with one constant per layer fitted to the training regions by area-weighted
least squares on half the trace of the diagnosed tensor.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any, ClassVar

import numpy as np
import numpy.typing as npt

from learnclosure.closures.diffusivities import (
    LARGEST_DIFFUSIVITY,
    eady_visbeck_diffusivity,
    energy_bounded_diffusivity,
    held_larichev_diffusivity,
    mixing_length_diffusivity,
    relative_to_eddies,
    suppressed_diffusivity,
)
from learnclosure.errors import TrainingError
from learnclosure.features.instability import EADY_FACTOR
from learnclosure.features.scales import eddy_speed, planetary_beta, rhines_length

if TYPE_CHECKING:
    from learnclosure.closures.table import Table

FloatArray = npt.NDArray[np.float64]

MEMORY = 4.0 * 86400.0
"""Time after which eddies have forgotten their velocity, s (Ferrari and Nikurashin 2010)."""


class Baseline:
    """Common behaviour of all baselines.

    Parameters
    ----------
    published : bool
        Use the published constant instead of fitted ones.

    Attributes
    ----------
    family : str
        Family whose inputs it needs.
    layers_ : ndarray, shape (layer,)
        Values of ``layer_index`` met in training, increasing.
    constants_ : ndarray, shape (layer,)
        Constant of each layer.
    """

    name: ClassVar[str]
    family: ClassVar[str]
    published_constant: ClassVar[float | None] = None
    required: ClassVar[tuple[str, ...]] = ("layer_index",)

    def __init__(self, *, published: bool = False) -> None:
        if published and self.published_constant is None:
            raise TrainingError(
                "this baseline has no published constant", where=self.name, remedy="fit it"
            )
        self.published = published

    def fit(self, table: Table) -> Baseline:
        """Fit one constant per layer, or take the published one for all.

        Parameters
        ----------
        table : Table

        Returns
        -------
        Baseline

        Raises
        ------
        TrainingError
            If the table lacks an input the baseline needs.
        """
        for name in self.required:
            if name not in table.inputs:
                raise TrainingError(
                    f"the baseline needs the input {name}",
                    where=self.name,
                    remedy=f"give regions from which {name} can be computed",
                )
        index = table.inputs["layer_index"]
        self.layers_: FloatArray = np.unique(index)
        if self.published and self.published_constant is not None:
            self.constants_: FloatArray = np.full(len(self.layers_), self.published_constant)
            return self
        shape = np.broadcast_to(self._unit_diffusivity(np, table.inputs), len(table))
        truth = 0.5 * (table.tensor[:, 0] + table.tensor[:, 3])
        weight = table.weight / np.mean(table.weight)
        constants = []
        for layer in self.layers_:
            chosen = index == layer
            w, k, s = weight[chosen], truth[chosen], shape[chosen]
            power = float(np.sum(w * s * s))
            constants.append(float(np.sum(w * s * k)) / power if power > 0.0 else 0.0)
        self.constants_ = np.maximum(np.array(constants), 0.0)
        return self

    def tensor(self, xp: Any, inputs: Mapping[str, Any]) -> tuple[Any, Any, Any, Any]:
        """Return the transport tensor on model axes.

        Parameters
        ----------
        xp : namespace
            Array namespace: NumPy or the graph.
        inputs : mapping of str to array

        Returns
        -------
        xx, xy, yx, yy : array, m2 s-1
        """
        diffusivity = self.diffusivity(xp, inputs)
        zero = diffusivity * 0.0
        return diffusivity, zero, zero, diffusivity

    def diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        """Return the diffusivity.

        Parameters
        ----------
        xp : namespace
        inputs : mapping of str to array

        Returns
        -------
        array, m2 s-1
        """
        constant = self._layer_constant(xp, inputs["layer_index"])
        return constant * self._unit_diffusivity(xp, inputs)

    def parameters(self) -> dict[str, Any]:
        """Return the constants in use, JSON-safe."""
        return {
            "published": self.published,
            "constants": {
                f"layer {int(layer)}": float(constant)
                for layer, constant in zip(self.layers_, self.constants_, strict=True)
            },
        }

    def _layer_constant(self, xp: Any, layer_index: Any) -> Any:
        """Constant of the nearest trained layer."""
        value = layer_index * 0.0 + float(self.constants_[-1])
        for number in range(len(self.layers_) - 2, -1, -1):
            between = 0.5 * float(self.layers_[number] + self.layers_[number + 1])
            value = xp.where(layer_index < between, float(self.constants_[number]), value)
        return value

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        raise NotImplementedError


class ConstantPerLayer(Baseline):
    """One diffusivity per layer: the area-weighted mean of half the trace."""

    name = "constant"
    family = "mean-field"

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:  # noqa: ARG002
        return inputs["layer_index"] * 0.0 + 1.0


def _inverse_time(inputs: Mapping[str, Any]) -> Any:
    """``|f| / sqrt(Ri)`` of the column, s-1."""
    return inputs["eady_growth_rate"] * (1.0 / EADY_FACTOR)


class EadyVisbeck(Baseline):
    """Growth rate times the square of the width of the baroclinic zone.

    ``k = 0.015 L^2 <|f| / sqrt(Ri)>`` with L the jet width (Visbeck et al. 1997, J. Phys.
    Oceanogr. 27, 381-402; the length also of Green 1970, Q. J. R. Meteorol. Soc. 96,
    157-185).
    """

    name = "eady-visbeck"
    family = "mean-field"
    published_constant = 0.015
    required = ("layer_index", "eady_growth_rate", "jet_width")

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:  # noqa: ARG002
        return eady_visbeck_diffusivity(_inverse_time(inputs), inputs["jet_width"], 1.0)


class Stone(Baseline):
    """Growth rate times the square of the deformation radius.

    ``k = L^2 <|f| / sqrt(Ri)>`` with L the first deformation radius and a constant of
    order one (Stone 1972, J. Atmos. Sci. 29, 405-418; constant from memory).
    """

    name = "stone"
    family = "mean-field"
    published_constant = 1.0
    required = ("layer_index", "eady_growth_rate", "deformation_radius")

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:  # noqa: ARG002
        return eady_visbeck_diffusivity(_inverse_time(inputs), inputs["deformation_radius"], 1.0)


class HeldLarichev(Baseline):
    """A cascade to the length where beta stops it.

    ``k = U R xi^2`` with ``xi = U / (beta R^2)`` and U the growth rate ``|f| / sqrt(Ri)``
    times R (Held and Larichev 1996, J. Atmos. Sci. 53, 946-952; constant of order one from
    memory).
    """

    name = "held-larichev"
    family = "mean-field"
    published_constant = 1.0
    required = (
        "layer_index",
        "eady_growth_rate",
        "deformation_radius",
        "planetary_beta_x",
        "planetary_beta_y",
    )

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        radius = inputs["deformation_radius"]
        speed = _inverse_time(inputs) * radius
        found = held_larichev_diffusivity(speed, radius, planetary_beta(xp, inputs), xp=xp)
        return xp.minimum(found, LARGEST_DIFFUSIVITY)


class EkeMixingLength(Baseline):
    """Eddy speed times the smaller of Rhines length and deformation radius.

    The form of Bates et al. 2014 without suppression by the mean flow; 0.35 as published,
    or one fitted constant per layer.
    """

    name = "eke-mixing-length"
    family = "local-energy"
    published_constant = 0.35
    required: ClassVar[tuple[str, ...]] = (
        "layer_index",
        "eddy_kinetic_energy",
        "eddy_kinetic_energy_column",
        "deformation_radius",
        "planetary_beta_x",
        "planetary_beta_y",
    )

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        speed = eddy_speed(xp, inputs["eddy_kinetic_energy"])
        length = xp.minimum(rhines_length(xp, inputs), inputs["deformation_radius"])
        return mixing_length_diffusivity(speed, length, self._relative(xp, inputs), factor=1.0)

    def _relative(self, xp: Any, inputs: Mapping[str, Any]) -> Any:  # noqa: ARG002
        """Speed of the mean flow relative to the eddies, m s-1."""
        return 0.0


_SUPPRESSED = ("x_velocity", "y_velocity", "column_velocity_x", "column_velocity_y")


def _relative_speed(xp: Any, inputs: Mapping[str, Any]) -> Any:
    along_x, along_y = relative_to_eddies(inputs)
    return xp.sqrt(along_x * along_x + along_y * along_y)


class Bates(EkeMixingLength):
    """Eddy speed times a mixing length, suppressed where the mean flow leaves the eddies.

    Bates et al. 2014, J. Phys. Oceanogr. 44, 1523-1540 (0.35 and 4 from memory), with eddies
    that drift with the column and as long Rossby waves.
    """

    name = "bates"
    required = (*EkeMixingLength.required, *_SUPPRESSED)

    def _relative(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        return _relative_speed(xp, inputs)


class FerrariNikurashin(Baseline):
    """Eddy energy times a memory of four days, suppressed by the drift of the eddies.

    Ferrari and Nikurashin 2010, J. Phys. Oceanogr. 40, 1501-1519 (form and time from
    memory), with the deformation radius as inverse wavenumber and eddies that drift with
    the column and as long Rossby waves.
    """

    name = "ferrari-nikurashin"
    family = "local-energy"
    published_constant = 1.0
    required = (
        "layer_index",
        "eddy_kinetic_energy",
        "deformation_radius",
        "planetary_beta_x",
        "planetary_beta_y",
        *_SUPPRESSED,
    )

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        energy = xp.maximum(inputs["eddy_kinetic_energy"], 0.0)
        wavenumber = 1.0 / xp.maximum(inputs["deformation_radius"], 1.0)
        return suppressed_diffusivity(energy, 1.0 / MEMORY, wavenumber, _relative_speed(xp, inputs))


class EnergyBounded(Baseline):
    """Share of the most that eddy energy allows.

    ``k = 0.1 E sqrt(Ri) / |f|`` (Marshall, Maddison and Berloff 2012, J. Phys. Oceanogr. 42,
    539-557; 0.1 from memory) over the whole column, with the kinetic energy a host gives
    for E, which leaves out the potential part.
    """

    name = "energy-bounded"
    family = "local-energy"
    published_constant = 0.1
    required = ("layer_index", "eddy_kinetic_energy_column", "eady_growth_rate")

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        energy = xp.maximum(inputs["eddy_kinetic_energy_column"], 0.0)
        found = energy_bounded_diffusivity(energy, _inverse_time(inputs), 1.0, xp=xp)
        return xp.minimum(found, LARGEST_DIFFUSIVITY)


BASELINES: dict[str, type[Baseline]] = {
    baseline.name: baseline
    for baseline in (
        ConstantPerLayer,
        EadyVisbeck,
        Stone,
        HeldLarichev,
        EkeMixingLength,
        Bates,
        FerrariNikurashin,
        EnergyBounded,
    )
}
