"""The loops of the moments where members differ in weight or are missing at places."""

from __future__ import annotations

import numpy as np

from learnclosure.compiled import compiled
from learnclosure.diagnosis.kernel_parts import fold, scale


@compiled()
def _weigh(plan, area, values, weight):  # type: ignore[no-untyped-def]
    """Give members their weights, none where a value is missing; count those in the sea."""
    fields, members, points = values.shape
    missing = 0
    for member in range(members):
        for point in range(points):
            weight[member, point] = 1.0 if area[point] > 0.0 else 0.0
        if plan.weighting > 0:
            for point in range(points):
                thick = values[plan.thickness, member, point]
                present = thick > 0.0 and area[point] > 0.0
                missing += 1 if area[point] > 0.0 and not thick >= 0.0 else 0
                own = thick if plan.weighting == 1 else 1.0
                weight[member, point] = own if present else 0.0
        for field in range(fields):
            for point in range(points):
                if not np.isfinite(values[field, member, point]):
                    values[field, member, point] = 0.0
                    missing += 1 if weight[member, point] > 0.0 else 0
                    weight[member, point] = 0.0
    return missing


@compiled()
def _average(values, weight, total, mean):  # type: ignore[no-untyped-def]
    """Weighted means over members."""
    fields, members, points = values.shape
    total[:] = 0.0
    for member in range(members):
        total += weight[member]
    for field in range(fields):
        average = mean[field]
        average[:] = 0.0
        for member in range(members):
            for point in range(points):
                average[point] += weight[member, point] * values[field, member, point]
        for point in range(points):
            average[point] /= total[point] if total[point] > 0.0 else 1.0


@compiled()
def _group_sums(plan, values, weight, mean, product, apart, total):  # type: ignore[no-untyped-def]
    """Sum weights, departures and their products over each group."""
    fields, members, points = values.shape
    groups = len(plan.sizes)
    departure = np.empty((fields, points))
    product[:], apart[:], total[:] = 0.0, 0.0, 0.0
    for member in range(members):
        group, own = member % groups, weight[member]
        for point in range(points):
            total[group, 0, point] += own[point]
            total[group, 1, point] += 1.0 if own[point] > 0.0 else 0.0
        for field in range(fields):
            for point in range(points):
                departure[field, point] = values[field, member, point] - mean[field, point]
                apart[group, field, point] += own[point] * departure[field, point]
        for pair in range(len(plan.pair_lead)):
            first = departure[plan.leads[plan.pair_lead[pair]]]
            second, summed = departure[plan.pair_field[pair]], product[group, pair]
            for point in range(points):
                summed[point] += own[point] * first[point] * second[point]


@compiled()
def _sum_part(mean, apart, total, members, values):  # type: ignore[no-untyped-def]
    """Average part of the members, whose departures are summed in ``apart``."""
    for field in range(len(values)):
        for point in range(len(total)):
            summed = total[point] * mean[field, point] + apart[field, point]
            values[field, point] = summed / members


@compiled()
def _estimate(tile, plan, area, mean, product, apart, total, present, members, fields, target):  # type: ignore[no-untyped-def]
    """Fold weights, means and unbiased covariances of part of the members.

    Without fields the weight of means is left out too.
    """
    first = 2 if fields > 0 else 1
    pairs, points = len(target) - first - fields, len(area)
    values = np.empty((max(fields, pairs, 2), points))
    for point in range(points):
        values[first - 1, point] = total[point] / members if present[point] > 1.0 else 0.0
        if fields > 0:
            values[0, point] = total[point] / members
    scale(values, area, values[:first])
    fold(values, tile, plan.factor, target[:first])
    _sum_part(mean, apart, total, members, values[:fields])
    scale(values, area, values[:fields])
    fold(values, tile, plan.factor, target[first : first + fields])
    for pair in range(pairs):
        one, two = plan.leads[plan.pair_lead[pair]], plan.pair_field[pair]
        for point in range(points):
            count = present[point]
            values[pair, point] = 0.0
            if count > 1.0:
                moment = product[pair, point] - apart[one, point] * apart[two, point] / total[point]
                values[pair, point] = moment * (count / (count - 1.0)) / members
    scale(values, area, values[:pairs])
    fold(values, tile, plan.factor, target[first + fields :])


@compiled()
def _group_estimate(tile, plan, area, mean, product, apart, total, size, target):  # type: ignore[no-untyped-def]
    """Fold the weight, means and mean products of one group."""
    points = len(area)
    values = np.empty((1 + plan.kept_fields + plan.kept_pairs, points))
    for point in range(points):
        values[0, point] = total[point] / size
    _sum_part(mean, apart, total, size, values[1 : 1 + plan.kept_fields])
    for pair in range(plan.kept_pairs):
        for point in range(points):
            values[1 + plan.kept_fields + pair, point] = product[pair, point] / size
    scale(values, area, values)
    fold(values, tile, plan.factor, target)


@compiled()
def _over_groups(values, first, step, target):  # type: ignore[no-untyped-def]
    """Sum every ``step``-th group from the first one."""
    target[:] = 0.0
    for group in range(first, values.shape[0], step):
        for number in range(values.shape[1]):
            for point in range(values.shape[2]):
                target[number, point] += values[group, number, point]


@compiled()
def add_weighted_tile(tile, plan, area, values, mean, whole, halves, groups, left):  # type: ignore[no-untyped-def]
    """Find the block sums of one tile with a weight for each member and place.

    Thickness-weighted covariances are unbiased only approximately: the factor n/(n - 1),
    with n the members present, is exact where all weigh the same.
    """
    fields, members, points = values.shape
    pairs, count = len(plan.pair_lead), len(plan.sizes)
    weight = np.empty((members, points))
    missing = _weigh(plan, area, values, weight)
    # The second row of totals counts the members present.
    product, apart = np.empty((count, pairs, points)), np.empty((count, fields, points))
    total = np.empty((count, 2, points))
    all_product, part_product = np.empty((pairs, points)), np.empty((pairs, points))
    part_apart, all_total = np.zeros((fields, points)), np.empty((2, points))
    part_total = np.empty((2, points))
    _average(values, weight, all_total[0], mean)
    _group_sums(plan, values, weight, mean, product, apart, total)
    _over_groups(product, 0, 1, all_product)
    _over_groups(total, 0, 1, all_total)
    # Departures from the mean of all sum to nothing but rounding.
    _estimate(tile, plan, area, mean, all_product, part_apart, all_total[0], all_total[1],
              members, fields, whole)  # fmt: skip
    for half in range(2 if plan.halves else 0):
        _over_groups(product, half, 2, part_product)
        _over_groups(apart, half, 2, part_apart)
        _over_groups(total, half, 2, part_total)
        _estimate(tile, plan, area, mean, part_product, part_apart, part_total[0], part_total[1],
                  plan.sizes[half::2].sum(), fields, halves[half])  # fmt: skip
    for group in range(count):
        _group_estimate(tile, plan, area, mean, product[group], apart[group], total[group, 0],
                        plan.sizes[group], groups[group])  # fmt: skip
        if plan.left_out:
            part_product[:] = all_product - product[group]
            part_apart[:] = -apart[group]
            part_total[:] = all_total - total[group]
            _estimate(tile, plan, area, mean, part_product, part_apart, part_total[0],
                      part_total[1], members - plan.sizes[group], 0, left[group])  # fmt: skip
    return missing
