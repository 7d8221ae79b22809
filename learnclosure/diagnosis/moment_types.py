"""What the diagnosis asks of an ensemble, and the moments it gets of it."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal, Protocol, runtime_checkable

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]
Fields = dict[str, npt.NDArray[np.floating]]
Definition = Literal["ensemble", "ensemble-subgrid", "time"]


@runtime_checkable
class PartialSource(Protocol):
    """An ensemble that can also be read by part, so that memory grows with none of its sizes."""

    def fields_of(self, time: int, members: slice, rows: slice) -> Fields:
        """Return fields of one time, some members and some rows, (member, layer, row, x).

        Numbers may be in single precision, as the files have them.
        """
        ...


@dataclass(frozen=True)
class GroupMoments:
    """Mean state and eddy fluxes of one group of members on the coarse grid.

    Attributes
    ----------
    mean : dict of str to ndarray, shape (layer, y, x)
        Ensemble and time means of velocities, tracers and buoyancy; of weighted averages
        also the thickness, and ``bolus_x`` and ``bolus_y``, the eddy flux of thickness over
        the mean thickness.
    flux : dict of str to ndarray, shape (2, layer, y, x)
        Time mean of the unbiased covariance of velocity and each tracer or active scalar.
    eddy_kinetic_energy : ndarray, shape (layer, y, x), m2 s-2
        From unbiased variances.
    covariance : dict of pair of str to ndarray, shape (layer, y, x)
        Unbiased covariances of velocity components and variances of active scalars.
    upward_flux : dict of str to ndarray, shape (layer, y, x)
        As ``flux``, along z; empty without an upward velocity.
    valid_share : ndarray or None, shape (layer, y, x)
        Share of members and times that count, by area.
    """

    mean: dict[str, FloatArray]
    flux: dict[str, FloatArray]
    eddy_kinetic_energy: FloatArray
    covariance: dict[tuple[str, str], FloatArray] = field(default_factory=dict)
    upward_flux: dict[str, FloatArray] = field(default_factory=dict)
    valid_share: FloatArray | None = None


@dataclass(frozen=True)
class Moments:
    """Moments of all members, of two halves and without each group of members.

    With few members each is a group of its own; more members share groups, so that the size
    of all this does not grow with them.

    Attributes
    ----------
    whole : GroupMoments
        Of all members.
    halves : tuple of GroupMoments
        Of every other member, two groups; empty with fewer than four members.
    member_mean : dict of str to ndarray, shape (group, layer, y, x)
        Time mean of each tracer of each group.
    member_product : dict of str to ndarray, shape (group, 2, layer, y, x)
        Time mean of each group's mean product of departures from the ensemble mean.
    left_out : tuple of pair of dict of str to ndarray
        Tracer means and eddy fluxes without each group; empty with too few members.
    group_weight : ndarray, shape (group, layer, y, x)
        What each group weighs in a sum over groups.
    unbias : float
        Factor from the mean product of departures to the unbiased covariance.
    blocks : tuple of tuples of GroupMoments
        The halves of the members in each of a few consecutive blocks of time.
    block_times : tuple of int
        Number of times of each block.
    """

    whole: GroupMoments
    halves: tuple[GroupMoments, ...]
    member_mean: dict[str, FloatArray]
    member_product: dict[str, FloatArray]
    left_out: tuple[tuple[dict[str, FloatArray], dict[str, FloatArray]], ...]
    group_weight: FloatArray
    unbias: float
    blocks: tuple[tuple[GroupMoments, ...], ...] = ()
    block_times: tuple[int, ...] = ()

    def subset(self, members: IndexArray) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
        """Tracer means and unbiased eddy fluxes of some of the groups of members.

        Departures stay those from the mean of all members, so that no products between
        members are needed; ``reliability.subset_noise`` says what that does to the noise.

        Parameters
        ----------
        members : ndarray of int
            Numbers of the groups, each once.

        Returns
        -------
        mean : dict of str to ndarray, shape (layer, y, x)
        flux : dict of str to ndarray, shape (2, layer, y, x)
        """
        weight = self.group_weight[members]
        total = weight.sum(axis=0)
        share = weight / np.where(total > 0.0, total, 1.0)
        mean = {
            name: (share * values[members]).sum(axis=0) for name, values in self.member_mean.items()
        }
        flux = {
            name: self.unbias * (share[:, None] * product[members]).sum(axis=0)
            for name, product in self.member_product.items()
        }
        return mean, flux

    def without_member(self, member: int) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
        """Tracer means and eddy fluxes of the ensemble without one group of members.

        They are exactly those of the members that remain, about their own mean.

        Parameters
        ----------
        member : int
            Number of the group: of the member, while each is a group of its own.

        Returns
        -------
        mean : dict of str to ndarray, shape (layer, y, x)
        flux : dict of str to ndarray, shape (2, layer, y, x)
        """
        return self.left_out[member]
