"""Ensemble means, eddy fluxes and what their sampling error needs, in one pass over time."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.sources import LEAST_MEMBERS_FOR_HALVES
from learnclosure.errors import DiagnosisError

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]

TIME_BLOCKS = 4
"""Consecutive blocks of time whose moments are kept apart, to see what more times give."""
VELOCITIES = ("x_velocity", "y_velocity")


class EnsembleSource(Protocol):
    """What the diagnosis asks of an ensemble; ``learnclosure.Ensemble`` offers it."""

    name: str
    split: str
    grid: Grid
    member_labels: tuple[int | str, ...]
    times: FloatArray
    tracers: tuple[str, ...]
    withheld_tracers: tuple[str, ...]
    units: dict[str, str]
    has_buoyancy: bool
    active: tuple[str, ...]
    left_out_gradients: dict[str, FloatArray]
    assumptions: tuple[str, ...]

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Return all fields of one time, shape (member, layer, y, x)."""
        ...


@dataclass(frozen=True)
class GroupMoments:
    """Mean state and eddy fluxes of one group of members on the coarse grid.

    Attributes
    ----------
    mean : dict of str to ndarray, shape (layer, y, x)
        Ensemble and time means of velocities, tracers and buoyancy.
    flux : dict of str to ndarray, shape (2, layer, y, x)
        Time mean of the unbiased (N - 1) covariance of velocity and each tracer or active
        field.
    eddy_kinetic_energy : ndarray, shape (layer, y, x), m2 s-2
        From unbiased variances.
    covariance : dict of pair of str to ndarray, shape (layer, y, x)
        Time mean of the unbiased covariances `covariance_pairs` asks for.
    """

    mean: dict[str, FloatArray]
    flux: dict[str, FloatArray]
    eddy_kinetic_energy: FloatArray
    covariance: dict[tuple[str, str], FloatArray] = field(default_factory=dict)


def covariance_pairs(active: tuple[str, ...]) -> tuple[tuple[str, str], ...]:
    """Pairs of fields whose covariance energetics and corrections need.

    Parameters
    ----------
    active : tuple of str
        Active fields.

    Returns
    -------
    tuple of pair of str
        Momentum fluxes and the variance of each active field.
    """
    momentum = (
        ("x_velocity", "x_velocity"), ("x_velocity", "y_velocity"), ("y_velocity", "y_velocity"),
    )  # fmt: skip
    return (*momentum, *((name, name) for name in active))


@dataclass(frozen=True)
class Moments:
    """Moments of all members, of two halves and, in closed form, without each member.

    Attributes
    ----------
    whole : GroupMoments
        Of all members.
    halves : tuple of GroupMoments
        Of every other member, two groups; empty with fewer than four members.
    member_mean : dict of str to ndarray, shape (member, layer, y, x)
        Time mean of each tracer of each member.
    member_product : dict of str to ndarray, shape (member, 2, layer, y, x)
        Time mean of each member's product of departures from the ensemble mean.
    blocks : tuple of tuples of GroupMoments
        The halves of the members in each of a few consecutive blocks of time.
    block_times : tuple of int
        Number of times of each block.
    """

    whole: GroupMoments
    halves: tuple[GroupMoments, ...]
    member_mean: dict[str, FloatArray]
    member_product: dict[str, FloatArray]
    blocks: tuple[tuple[GroupMoments, ...], ...] = ()
    block_times: tuple[int, ...] = ()

    def subset(self, members: IndexArray) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
        """Tracer means and unbiased eddy fluxes of some of the members.

        Departures stay those from the mean of all members, so that no products between
        members are needed; ``reliability.subset_noise`` says what that does to the noise.

        Parameters
        ----------
        members : ndarray of int
            Numbers of the members, each once.

        Returns
        -------
        mean : dict of str to ndarray, shape (layer, y, x)
        flux : dict of str to ndarray, shape (2, layer, y, x)
        """
        count = len(next(iter(self.member_product.values())))
        unbias = count / (count - 1)
        mean = {name: values[members].mean(axis=0) for name, values in self.member_mean.items()}
        flux = {
            name: unbias * product[members].mean(axis=0)
            for name, product in self.member_product.items()
        }
        return mean, _with_windows(flux, mean)

    def without_member(self, member: int) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
        """Tracer means and eddy fluxes of the ensemble without one member.

        Removing member i from a sum of N products of departures takes
        ``N/(N-1) d_i e_i`` away, which holds exactly since the mean moves with it.

        Parameters
        ----------
        member : int

        Returns
        -------
        mean : dict of str to ndarray, shape (layer, y, x)
        flux : dict of str to ndarray, shape (2, layer, y, x)
        """
        mean, flux = {}, {}
        for tracer, product in self.member_product.items():
            count = len(product)
            rest = product.sum(axis=0) - count / (count - 1) * product[member]
            flux[tracer] = rest / (count - 2)
        for name, values in self.member_mean.items():
            mean[name] = (values.sum(axis=0) - values[member]) / (len(values) - 1)
        return mean, _with_windows(flux, mean)


def _with_windows(
    flux: dict[str, FloatArray], mean: dict[str, FloatArray]
) -> dict[str, FloatArray]:
    """Add to covariances the mean eddy fluxes within the windows of the files."""
    return {
        name: covariance + np.stack([mean[f"{name}_within_{axis}"] for axis in "xy"])
        if f"{name}_within_x" in mean
        else covariance
        for name, covariance in flux.items()
    }


class _Group:
    """Running sums over time of one group of members."""

    def __init__(self, members: IndexArray) -> None:
        self.members = members
        self.mean: dict[str, FloatArray] = {}
        self.flux: dict[str, FloatArray] = {}
        self.energy: FloatArray | None = None
        self.covariance: dict[tuple[str, str], FloatArray] = {}

    def add_mean(self, name: str, coarse: FloatArray) -> None:
        value = coarse[self.members].mean(axis=0)
        self.mean[name] = self.mean[name] + value if name in self.mean else value

    def add_flux(self, name: str, summed: FloatArray) -> None:
        value = summed / (len(self.members) - 1)
        self.flux[name] = self.flux[name] + value if name in self.flux else value

    def add_energy(self, summed: FloatArray) -> None:
        value = summed / (len(self.members) - 1)
        self.energy = value if self.energy is None else self.energy + value

    @classmethod
    def merged(cls, parts: Sequence[_Group]) -> _Group:
        """Sum what the same members gave at different times."""
        total = cls(parts[0].members)
        for part in parts:
            for own, other in ((total.mean, part.mean), (total.flux, part.flux)):
                for name, value in other.items():
                    own[name] = own[name] + value if name in own else value
            for pair, value in part.covariance.items():
                known = total.covariance.get(pair)
                total.covariance[pair] = value if known is None else known + value
            if part.energy is not None:
                total.energy = part.energy if total.energy is None else total.energy + part.energy
        return total

    def add_covariance(self, pair: tuple[str, str], summed: FloatArray) -> None:
        value = summed / (len(self.members) - 1)
        self.covariance[pair] = self.covariance[pair] + value if pair in self.covariance else value

    def finish(self, times: int) -> GroupMoments:
        assert self.energy is not None
        mean = {name: total / times for name, total in self.mean.items()}
        covariance = {name: total / times for name, total in self.flux.items()}
        return GroupMoments(
            mean=mean,
            flux=_with_windows(covariance, mean),
            eddy_kinetic_energy=self.energy / times,
            covariance={pair: total / times for pair, total in self.covariance.items()},
        )


class _Snapshot:
    """Departures of one time and the coarse sums of their products over groups."""

    def __init__(
        self, fields: dict[str, FloatArray], coarsening: Coarsening, active: tuple[str, ...]
    ) -> None:
        self.coarsening = coarsening
        self.departure = {
            name: values - values.mean(axis=0)
            for name, values in fields.items()
            if (name != "buoyancy" or name in active) and "_within_" not in name
        }

    def products(self, first: str, second: str) -> FloatArray:
        """Coarse products of each member's departures, shape (member, layer, y, x)."""
        return self.coarsening.mean(self.departure[first] * self.departure[second])

    def group_sum(
        self, products: FloatArray, first: str, second: str, members: IndexArray
    ) -> FloatArray:
        """Sum over a group of products of departures from the group's own mean."""
        shift = self.departure[first][members].mean(axis=0) * (
            self.departure[second][members].mean(axis=0)
        )
        return np.asarray(
            products[members].sum(axis=0) - len(members) * self.coarsening.mean(shift)
        )


def _check_members(source: EnsembleSource) -> int:
    count = len(source.member_labels)
    if count < 2:
        raise DiagnosisError(
            "one member has no eddies about an ensemble mean",
            where=f"region '{source.name}'",
            found="one member",
            expected="at least 2 members",
            remedy="add members to 'files'",
        )
    return count


def accumulate_moments(
    source: EnsembleSource,
    coarsening: Coarsening,
    *,
    progress: Callable[[float], None] | None = None,
) -> Moments:
    """Accumulate means and eddy fluxes over all times of an ensemble.

    Departures are taken from the ensemble mean of the same time at full resolution;
    their products are averaged over blocks, divided by N - 1 and averaged over time.
    One time is in memory at once.

    Parameters
    ----------
    source : EnsembleSource
    coarsening : Coarsening
    progress : callable, optional
        Called with the share done.

    Returns
    -------
    Moments

    Raises
    ------
    DiagnosisError
        If there are fewer than two members.
    """
    count = _check_members(source)
    everyone = np.arange(count)
    whole = _Group(everyone)
    times = len(source.times)
    blocks: list[list[_Group]] = [[] for _ in range(min(TIME_BLOCKS, times))]
    block_of = np.arange(times) * len(blocks) // times
    if count >= LEAST_MEMBERS_FOR_HALVES:
        blocks = [[_Group(everyone[0::2]), _Group(everyone[1::2])] for _ in blocks]
    names = (*source.tracers, *source.withheld_tracers, *source.active)
    member_mean: dict[str, FloatArray] = {}
    member_product: dict[str, FloatArray] = {}
    for time in range(times):
        halves = blocks[block_of[time]]
        fields = source.fields(time)
        for name, values in fields.items():
            coarse = coarsening.mean(values)
            for group in (whole, *halves):
                group.add_mean(name, coarse)
            if name in names or "_within_" in name:
                known = member_mean.get(name)
                member_mean[name] = coarse if known is None else known + coarse
        snapshot = _Snapshot(fields, coarsening, source.active)
        energy = [snapshot.products(axis, axis) for axis in VELOCITIES]
        whole.add_energy(0.5 * (energy[0] + energy[1]).sum(axis=0))
        for half in halves:
            parts = [
                snapshot.group_sum(products, axis, axis, half.members)
                for axis, products in zip(("x_velocity", "y_velocity"), energy, strict=True)
            ]
            half.add_energy(0.5 * (parts[0] + parts[1]))
        squares = {(axis, axis): part for axis, part in zip(VELOCITIES, energy, strict=True)}
        for pair in covariance_pairs(source.active):
            products = squares.get(pair)
            if products is None:
                products = snapshot.products(*pair)
            whole.add_covariance(pair, products.sum(axis=0))
            for half in halves:
                half.add_covariance(pair, snapshot.group_sum(products, *pair, half.members))
        for name in names:
            pairs = [snapshot.products(axis, name) for axis in ("x_velocity", "y_velocity")]
            both = np.stack(pairs, axis=1)
            known = member_product.get(name)
            member_product[name] = both if known is None else known + both
            whole.add_flux(name, both.sum(axis=0))
            for half in halves:
                parts = [
                    snapshot.group_sum(products, axis, name, half.members)
                    for axis, products in zip(("x_velocity", "y_velocity"), pairs, strict=True)
                ]
                half.add_flux(name, np.stack(parts))
        if progress is not None:
            progress((time + 1) / times)
    lengths = tuple(int(length) for length in np.bincount(block_of))
    return Moments(
        whole=whole.finish(times),
        halves=tuple(_Group.merged(parts).finish(times) for parts in zip(*blocks, strict=True)),
        member_mean={name: total / times for name, total in member_mean.items()},
        member_product={name: total / times for name, total in member_product.items()},
        blocks=tuple(
            tuple(half.finish(length) for half in halves)
            for halves, length in zip(blocks, lengths, strict=True)
        ),
        block_times=lengths,
    )
