"""Running sums of moments: they add up over times and members, and end as means."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from learnclosure.diagnosis.kernels import FIRST, PAIR_WEIGHT, WEIGHT
from learnclosure.diagnosis.moment_layout import HORIZONTAL, THICKNESS, UPWARD, Layout, group_sizes
from learnclosure.diagnosis.moment_types import FloatArray, GroupMoments, Moments


@dataclass
class MomentState:
    """Sums over places and times, by name; states of disjoint times or members add up.

    Attributes
    ----------
    sums : dict of str to ndarray
        Each with trailing axes (layer, coarse y, coarse x).
    fields : tuple of str
        Fields that were summed, in order.

    Examples
    --------
    >>> import numpy as np
    >>> one, two = MomentState({"a": np.ones(2)}), MomentState({"a": np.ones(2), "b": np.ones(1)})
    >>> {name: values.tolist() for name, values in one.merge(two).sums.items()}
    {'a': [2.0, 2.0], 'b': [1.0]}
    """

    sums: dict[str, FloatArray]
    fields: tuple[str, ...] = ()

    def merge(self, other: MomentState) -> MomentState:
        """Return the state of both. The order of merging matters for rounding only.

        Parameters
        ----------
        other : MomentState

        Returns
        -------
        MomentState
        """
        merged = dict(self.sums)
        for name, values in other.sums.items():
            merged[name] = merged[name] + values if name in merged else values
        return MomentState(merged, self.fields or other.fields)

    def of(self, name: str, shape: tuple[int, ...]) -> FloatArray:
        """Return a sum to add to, zero if there is none yet."""
        if name not in self.sums:
            self.sums[name] = np.zeros(shape)
        return self.sums[name]


def _ratio(summed: FloatArray, weight: FloatArray) -> FloatArray:
    return np.asarray(np.where(weight > 0.0, summed / np.where(weight > 0.0, weight, 1.0), 0.0))


@dataclass(frozen=True)
class Finisher:
    """Turns sums to moments.

    Attributes
    ----------
    layouts : mapping of str to Layout
    area : ndarray, shape (layer, coarse y, coarse x), m2
        Sea area of coarse cells.
    members : int
    times : int
    over_time : bool
        Whether departures are from means over time.
    """

    layouts: Mapping[str, Layout]
    area: FloatArray
    members: int
    times: int
    over_time: bool = False

    def finish(self, state: MomentState, block_times: tuple[int, ...]) -> Moments:
        """Turn the sums of all times to moments.

        Parameters
        ----------
        state : MomentState
        block_times : tuple of int
            Number of times of each block.

        Returns
        -------
        Moments
        """
        layout = self.layouts["moments"]
        blocks = tuple(
            tuple(self._part(state, f"halves.{number}", times, half) for half in range(2))
            if f"moments.halves.{number}" in state.sums
            else ()
            for number, times in enumerate(block_times)
        )
        halves: tuple[GroupMoments, ...] = ()
        if all(blocks):
            total = MomentState(dict(state.sums))
            for name in self.layouts:
                parts = [state.sums[f"{name}.halves.{number}"] for number in range(len(blocks))]
                total.sums[f"{name}.halves"] = np.sum(parts, axis=0)
            halves = tuple(self._part(total, "halves", self.times, half) for half in range(2))
        groups = state.sums["moments.groups"]
        within = self._within(layout, groups)
        unbias = 1.0 if self.over_time else self.members / (self.members - 1)
        pairs = groups[:, 1 + layout.kept_fields :] + within / unbias
        weight = groups[:, 0]
        return Moments(
            whole=self._part(state, "whole", self.times),
            halves=halves,
            member_mean={
                name: _ratio(groups[:, 1 + number], weight)
                for number, name in enumerate(layout.scalars)
            },
            member_product={
                name: _ratio(pairs[:, 2 * number : 2 * number + 2], weight[:, None])
                for number, name in enumerate(layout.scalars)
            },
            left_out=self._left_out(state, layout),
            group_weight=weight * group_sizes(self.members)[:, None, None, None],
            unbias=unbias,
            blocks=blocks,
            block_times=block_times,
        )

    def _part(
        self, state: MomentState, which: str, times: int, half: int | None = None
    ) -> GroupMoments:
        layout = self.layouts["moments"]
        sums = state.sums[f"moments.{which}"]
        sums = sums if half is None else sums[half]
        mean = {
            name: _ratio(sums[FIRST + number], sums[WEIGHT])
            for number, name in enumerate(layout.fields)
        }
        covariance = {}
        for number, pair in enumerate(layout.pairs):
            value = _ratio(sums[FIRST + len(layout.fields) + number], sums[PAIR_WEIGHT])
            name = layout.within_name(pair)
            covariance[pair] = value if name is None else value + mean[name]
        flux = {
            name: np.stack([covariance.pop((axis, name)) for axis in HORIZONTAL])
            for name in layout.scalars
        }
        upward = {
            name: covariance.pop((UPWARD, name))
            for name in layout.scalars
            if UPWARD in layout.velocities
        }
        mean = {name: values for name, values in mean.items() if "_within_" not in name}
        share = sums[WEIGHT]
        if "bolus" in self.layouts:
            plain = state.sums[f"bolus.{which}"]
            plain = plain if half is None else plain[half]
            share = plain[WEIGHT]
            thickness = _ratio(sums[WEIGHT], times * self.area)
            mean[THICKNESS] = thickness
            bolus = self.layouts["bolus"]
            first = FIRST + len(bolus.fields)
            moved = plain[first : first + 2].copy()
            for number, pair in enumerate(bolus.pairs[:2]):
                own = bolus.within_name(pair)
                if own is not None:
                    moved[number] += plain[FIRST + bolus.fields.index(own)]
            moved = _ratio(moved, times * self.area)
            flux[THICKNESS] = moved
            mean["bolus_x"], mean["bolus_y"] = _ratio(moved, thickness)
            place = first + bolus.pairs.index((THICKNESS, THICKNESS))
            covariance[THICKNESS, THICKNESS] = _ratio(plain[place], times * self.area)
        energy = 0.5 * (
            covariance["x_velocity", "x_velocity"] + covariance["y_velocity", "y_velocity"]
        )
        return GroupMoments(
            mean=mean,
            flux=flux,
            eddy_kinetic_energy=energy,
            covariance=covariance,
            upward_flux=upward,
            valid_share=_ratio(share, times * self.area),
        )

    def _within(self, layout: Layout, groups: FloatArray) -> FloatArray:
        """Return what fields hold already of each kept covariance."""
        found = np.zeros((len(groups), layout.kept_pairs, *self.area.shape))
        for number, pair in enumerate(layout.pairs[: layout.kept_pairs]):
            name = layout.within_name(pair)
            if name is not None:
                found[:, number] = groups[:, 1 + layout.fields.index(name)]
        return found

    def _left_out(
        self, state: MomentState, layout: Layout
    ) -> tuple[tuple[dict[str, FloatArray], dict[str, FloatArray]], ...]:
        if "moments.left" not in state.sums:
            return ()
        whole, groups = state.sums["moments.whole"], state.sums["moments.groups"]
        found = []
        for group, size in enumerate(group_sizes(self.members)):
            kept = 1 + layout.kept_fields
            every = np.concatenate([whole[:1], whole[FIRST : FIRST + layout.kept_fields]])
            rest = self.members * every - size * groups[group, :kept]
            means = _ratio(rest[1:], rest[0])
            left = state.sums["moments.left"][group]
            fluxes = _ratio(left[1:], left[0])
            for number, pair in enumerate(layout.pairs[: layout.kept_pairs]):
                name = layout.within_name(pair)
                if name is not None:
                    fluxes[number] += means[layout.fields.index(name)]
            mean = {name: means[number] for number, name in enumerate(layout.scalars)}
            flux = {
                name: fluxes[2 * number : 2 * number + 2]
                for number, name in enumerate(layout.scalars)
            }
            if "bolus.left" in state.sums:
                remaining = (self.members - size) * self.times * self.area
                mean[THICKNESS] = _ratio(rest[0], remaining)
                flux[THICKNESS] = _ratio(
                    state.sums["bolus.left"][group][1:3], self.times * self.area
                )
            found.append((mean, flux))
        return tuple(found)
