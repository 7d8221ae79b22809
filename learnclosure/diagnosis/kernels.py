"""Compiled loops of the moments: one visit to every value, sums in double precision.

Members are read where they lie, in tiles of a few rows and columns that stay in the
processor's cache. In each tile the mean over members is found first and products of
departures from it second, so that nothing is lost to cancellation however large the mean
is beside the eddies. Moments of part of the members follow from sums of departures from
the mean of all (Chan, Golub and LeVeque 1983, Am. Stat. 37, 242-247; from memory)::

    M_part = sum w d e - (sum w d) (sum w e) / sum w

Every operation acts on one place, and the order of sums is fixed by member, row and
column. Results are the same to the last bit however rows, layers and columns are shared
out.
"""

from __future__ import annotations

import numpy as np

from learnclosure.compiled import compiled
from learnclosure.diagnosis.kernel_parts import (
    Tile,
    fold,
    load,
    multiply,
    scale,
)
from learnclosure.diagnosis.kernels_weighted import add_weighted_tile

TILE_BYTES = 2**18
WEIGHT, PAIR_WEIGHT, FIRST = 0, 1, 2
"""Places of the weights of means and of products, and of the first mean."""


@compiled()
def _depart(values, area, mean):  # type: ignore[no-untyped-def]
    """Turn values into departures from their mean, zero on land; tell whether all is finite."""
    fields, members, points = values.shape
    lost = 0
    for field in range(fields):
        for point in range(points):
            mean[field, point] = 0.0
        for member in range(members):
            for point in range(points):
                mean[field, point] += values[field, member, point]
        for point in range(points):
            mean[field, point] /= members
            lost += 0 if np.isfinite(mean[field, point]) or area[point] <= 0.0 else 1
    if lost > 0:
        return False
    for field in range(fields):
        for member in range(members):
            for point in range(points):
                departure = values[field, member, point] - mean[field, point]
                values[field, member, point] = departure if area[point] > 0.0 else 0.0
    return True


@compiled()
def _group_sums(plan, area, values, group, lead, product, apart):  # type: ignore[no-untyped-def]
    """Sum products of departures, times area, and departures over one group."""
    fields, members, points = values.shape
    alone = plan.sizes[group] == 1
    wanted = fields if plan.halves or plan.left_out or plan.kept_fields > 0 else 0
    product[:] = 0.0
    apart[:wanted] = 0.0
    for member in range(group, members, len(plan.sizes)):
        for field in range(wanted):
            for point in range(points):
                apart[field, point] += values[field, member, point]
        for number in range(len(plan.leads)):
            field = plan.leads[number]
            for point in range(points):
                lead[number, point] = area[point] * values[field, member, point]
        for pair in range(len(plan.pair_lead)):
            number, field = plan.pair_lead[pair], plan.pair_field[pair]
            if alone:
                for point in range(points):
                    product[pair, point] = lead[number, point] * values[field, member, point]
            else:
                for point in range(points):
                    product[pair, point] += lead[number, point] * values[field, member, point]


@compiled()
def _fold_groups(tile, plan, area, values, whole, halves, groups, left, half_apart):  # type: ignore[no-untyped-def]
    """Fold sums of departures and of their products of each group, and add them up.

    ``left`` receives the products of a group's summed departures.
    """
    fields, _, points = values.shape
    pairs, blocks = len(plan.pair_lead), whole.shape[1]
    lead, product = np.empty((len(plan.leads), points)), np.empty((pairs, points))
    apart, scaled = np.empty((fields, points)), np.empty((max(fields, pairs), points))
    folded = np.empty((pairs, blocks))
    for group in range(len(plan.sizes)):
        half, alone = group % 2, plan.sizes[group] == 1
        _group_sums(plan, area, values, group, lead, product, apart)
        fold(product, tile, plan.factor, folded)
        for pair in range(pairs):
            for block in range(blocks):
                whole[FIRST + fields + pair, block] += folded[pair, block]
                halves[half, FIRST + fields + pair, block] += folded[pair, block]
        # With a member to itself, a group's product of sums is its sum of products.
        for pair in range(plan.kept_pairs):
            for block in range(blocks):
                groups[group, 1 + plan.kept_fields + pair, block] = folded[pair, block]
                left[group, 1 + pair, block] = folded[pair, block]
        if plan.left_out and not alone:
            multiply(plan, area, apart, scaled[: plan.kept_pairs])
            fold(scaled, tile, plan.factor, left[group, 1:])
        if plan.halves:
            for field in range(fields):
                for point in range(points):
                    half_apart[half, field, point] += apart[field, point]
        scale(apart, area, scaled[: plan.kept_fields])
        fold(scaled, tile, plan.factor, groups[group, 1 : 1 + plan.kept_fields])


@compiled()
def _finish_groups(plan, members, fields, whole, groups, left):  # type: ignore[no-untyped-def]
    """Turn sums over groups to means over each and to covariances without each."""
    for group in range(len(plan.sizes)):
        size = plan.sizes[group]
        rest = members - size
        for block in range(whole.shape[1]):
            groups[group, 0, block] = whole[WEIGHT, block]
            left[group, 0, block] = whole[WEIGHT, block]
            for field in range(plan.kept_fields):
                mean = whole[FIRST + field, block]
                groups[group, 1 + field, block] = mean + groups[group, 1 + field, block] / size
        for pair in range(plan.kept_pairs):
            place = 1 + plan.kept_fields + pair
            for block in range(whole.shape[1]):
                own = groups[group, place, block]
                if plan.left_out:
                    moment = whole[FIRST + fields + pair, block] - own
                    moment -= left[group, 1 + pair, block] / rest
                    left[group, 1 + pair, block] = moment / (rest - 1)
                groups[group, place, block] = own / size


@compiled()
def _even_tile(tile, plan, area, values, mean, whole, halves, groups, left):  # type: ignore[no-untyped-def]
    """Find the block sums of one tile of departures in which every member counts one."""
    fields, members, points = values.shape
    pairs, blocks = len(plan.pair_lead), whole.shape[1]
    scaled, folded = np.empty((max(fields, pairs), points)), np.empty((max(fields, pairs), blocks))
    half_apart = np.zeros((2, fields, points))
    scaled[0] = area
    fold(scaled, tile, plan.factor, whole[:1])
    whole[PAIR_WEIGHT] = whole[WEIGHT]
    scale(mean, area, scaled[:fields])
    fold(scaled, tile, plan.factor, whole[FIRST : FIRST + fields])
    whole[FIRST + fields :] = 0.0
    halves[:] = 0.0
    _fold_groups(tile, plan, area, values, whole, halves, groups, left, half_apart)
    for half in range(2 if plan.halves else 0):
        size = plan.sizes[half::2].sum()
        halves[half, :FIRST] = whole[:FIRST]
        scale(half_apart[half], area, scaled[:fields])
        fold(scaled, tile, plan.factor, folded[:fields])
        for field in range(fields):
            for block in range(blocks):
                mean_of_all = whole[FIRST + field, block]
                halves[half, FIRST + field, block] = mean_of_all + folded[field, block] / size
        multiply(plan, area, half_apart[half], scaled[:pairs])
        fold(scaled, tile, plan.factor, folded[:pairs])
        for pair in range(pairs):
            for block in range(blocks):
                moment = halves[half, FIRST + fields + pair, block] - folded[pair, block] / size
                halves[half, FIRST + fields + pair, block] = moment / (size - 1)
    _finish_groups(plan, members, fields, whole, groups, left)
    for pair in range(pairs):
        for block in range(blocks):
            whole[FIRST + fields + pair, block] /= members - 1


@compiled()
def _add(values, layer, row, block, target):  # type: ignore[no-untyped-def]
    """Add the block sums of a tile to the running sums."""
    for number in range(values.shape[0]):
        for place in range(values.shape[1]):
            target[number, layer, row, block + place] += values[number, place]


@compiled()
def add_moments(source, plan, area, first_block_row, whole, halves, groups, left):  # type: ignore[no-untyped-def]
    """Add the moments over members of one time, or of some of its rows, to running sums.

    Parameters
    ----------
    source : Rows
    plan : Plan
    area : ndarray, shape (layer, y, x), m2
        Of the rows given; zero on land.
    first_block_row : int
        Coarse row the first row given belongs to.
    whole : ndarray, shape (2 + field + product, layer, coarse y, coarse x)
        Sums over places and times of area times: the weight of means, that of products,
        means, and unbiased covariances.
    halves : ndarray, shape (2, 2 + field + product, layer, coarse y, coarse x)
        The same of each half of the members.
    groups : ndarray, shape (group, 1 + kept field + kept product, ...)
        Weight, means, and mean products of departures from the mean of all.
    left : ndarray, shape (group, 1 + kept product, ...)
        Weight and unbiased covariances without each group.

    Returns
    -------
    int
        Values missing in the sea. Where one is missing, its member does not count there.
    """
    fields, members, layers = source.planes.shape
    rows, columns = area.shape[1:]
    block_rows = min(plan.factor, rows)
    fitting = TILE_BYTES // (8 * fields * members * plan.factor * block_rows)
    step = plan.factor * min(max(fitting, 1), -(-columns // plan.factor))
    buffer = np.empty(fields * members * block_rows * step)
    area_buffer, mean_buffer = np.empty(block_rows * step), np.empty(fields * block_rows * step)
    blocks = step // plan.factor
    channels = whole.shape[0]
    groups_size, left_size = groups.shape[0] * groups.shape[1], left.shape[0] * left.shape[1]
    local_whole, local_halves = np.zeros(channels * blocks), np.zeros(2 * channels * blocks)
    local_groups, local_left = np.zeros(groups_size * blocks), np.zeros(left_size * blocks)
    missing = 0
    for layer in range(layers):
        for row in range(0, rows, plan.factor):
            for column in range(0, columns, step):
                tile = Tile(
                    layer, row, min(plan.factor, rows - row), column, min(step, columns - column)
                )
                points = tile.rows * tile.columns
                here = area_buffer[:points]
                for part in range(tile.rows):
                    for place in range(tile.columns):
                        here[part * tile.columns + place] = area[layer, row + part, column + place]
                if not (here > 0.0).any():
                    continue
                count = -(-tile.columns // plan.factor)
                # Contiguous views, which the compiler can run through several places at once.
                first = local_whole[: channels * count].reshape((channels, count))
                second = local_halves[: 2 * channels * count].reshape((2, channels, count))
                third = local_groups[: groups_size * count].reshape((*groups.shape[:2], count))
                fourth = local_left[: left_size * count].reshape((*left.shape[:2], count))
                values = buffer[: fields * members * points].reshape((fields, members, points))
                mean = mean_buffer[: fields * points].reshape((fields, points))
                load(source, tile, values.reshape((fields, members, tile.rows, tile.columns)))
                if plan.weighting == 0 and _depart(values, here, mean):
                    _even_tile(tile, plan, here, values, mean, first, second, third, fourth)
                else:
                    missing += add_weighted_tile(
                        tile, plan, here, values, mean, first, second, third, fourth
                    )
                out_row, out = first_block_row + row // plan.factor, column // plan.factor
                _add(first, layer, out_row, out, whole)
                for half in range(2):
                    _add(second[half], layer, out_row, out, halves[half])
                for group in range(len(plan.sizes)):
                    _add(third[group], layer, out_row, out, groups[group])
                    _add(fourth[group], layer, out_row, out, left[group])
    return missing
