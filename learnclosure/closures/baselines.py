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

from learnclosure.closures.constraints import TINY
from learnclosure.errors import TrainingError
from learnclosure.features.instability import EADY_FACTOR
from learnclosure.features.scales import eddy_speed, rhines_length

if TYPE_CHECKING:
    from learnclosure.closures.table import Table

FloatArray = npt.NDArray[np.float64]


def eady_visbeck_diffusivity(inverse_time: Any, length: Any, factor: Any) -> Any:
    """Diffusivity from the rate of baroclinic growth and a length.

    Parameters
    ----------
    inverse_time : array, s-1
        ``|f| / sqrt(Ri)``, averaged over the column.
    length : array, m
    factor : array or float, 1
        0.015 as published.

    Returns
    -------
    array, m2 s-1
        ``factor * inverse_time * length^2`` (Visbeck et al. 1997, J. Phys. Oceanogr. 27,
        381-402).

    Examples
    --------
    >>> round(eady_visbeck_diffusivity(2.5e-6, 100e3, 0.015), 6)
    375.0
    """
    return factor * inverse_time * length * length


def mixing_length_diffusivity(
    speed: Any, length: Any, relative_speed: Any = 0.0, *, factor: Any = 0.35, b1: float = 4.0
) -> Any:
    """Diffusivity from eddy speed and mixing length, suppressed by the mean flow.

    Parameters
    ----------
    speed : array, m s-1
        Root mean square eddy speed ``sqrt(2 EKE)``.
    length : array, m
    relative_speed : array, m s-1
        Mean flow minus eddy phase speed; zero for no suppression.
    factor, b1 : float, 1
        Constants, as published by default.

    Returns
    -------
    array, m2 s-1
        ``factor speed length / (1 + b1 relative_speed^2 / speed^2)`` (Bates et al. 2014,
        J. Phys. Oceanogr. 44, 1523-1540).

    Examples
    --------
    >>> speed = 0.02 ** 0.5
    >>> [round(mixing_length_diffusivity(speed, 30e3, c), 2) for c in (0.0, 0.05, 0.1, 0.2)]
    [1484.92, 989.95, 494.97, 164.99]
    """
    square = speed * speed
    return factor * speed * length * square / (square + b1 * relative_speed * relative_speed + TINY)


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


class EadyVisbeck(Baseline):
    """Eady growth rate times a length squared (Visbeck et al. 1997).

    Parameters
    ----------
    published : bool
        Use 0.015 in all layers and the jet width, the width of the baroclinic zone, as
        length; otherwise the deformation radius (Stone 1972, J. Atmos. Sci. 29, 405-418)
        and fitted constants.
    """

    name = "eady-visbeck"
    family = "mean-field"
    published_constant = 0.015
    required = ("layer_index", "eady_growth_rate", "deformation_radius", "jet_width")

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:  # noqa: ARG002
        length = inputs["jet_width" if self.published else "deformation_radius"]
        inverse_time = inputs["eady_growth_rate"] * (1.0 / EADY_FACTOR)
        return eady_visbeck_diffusivity(inverse_time, length, 1.0)


class EkeMixingLength(Baseline):
    """Eddy speed times the smaller of Rhines length and deformation radius.

    The form of Bates et al. 2014 without suppression by the mean flow, since a host gives
    no eddy phase speed; 0.35 as published, or one fitted constant per layer.
    """

    name = "eke-mixing-length"
    family = "local-energy"
    published_constant = 0.35
    required = (
        "layer_index",
        "eddy_kinetic_energy",
        "eddy_kinetic_energy_column",
        "deformation_radius",
    )

    def _unit_diffusivity(self, xp: Any, inputs: Mapping[str, Any]) -> Any:
        speed = eddy_speed(xp, inputs["eddy_kinetic_energy"])
        length = xp.minimum(rhines_length(xp, inputs), inputs["deformation_radius"])
        return mixing_length_diffusivity(speed, length, factor=1.0)


BASELINES: dict[str, type[Baseline]] = {
    baseline.name: baseline for baseline in (ConstantPerLayer, EadyVisbeck, EkeMixingLength)
}
