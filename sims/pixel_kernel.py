"""The innermost loops of the engine, in numba: one sample's sums over the pixels of the sky.

`sims.pixel_sum` calls `sum_samples` and says what its arguments are. Here everything is plain
arrays; what an array carries is told by its name.
"""

from __future__ import annotations

import numpy as np
from numba import njit, prange

from sims.beam_spline import grid_gain
from sims.horizon import horizon_sine
from sims.limb import step


@njit(inline="always")
def dot(a, b):  # type: ignore[no-untyped-def]
    return a[0] * b[0] + a[1] * b[1] + a[2] * b[2]


@njit(inline="always")
def cubic(table, cell, t, column):  # type: ignore[no-untyped-def]
    """Value of one column of a table of cubics."""
    c = table[cell]
    return ((c[3, column] * t + c[2, column]) * t + c[1, column]) * t + c[0, column]


@njit(inline="always")
def cell_of(scaled, intervals):  # type: ignore[no-untyped-def]
    """Interval of a table that a scaled argument falls into, and how far into it."""
    cell = min(max(int(scaled), 0), intervals - 1)
    return cell, scaled - cell


@njit(inline="always")
def add_product(tables, first, second, whole, weight, brightness_k, p, sums):  # type: ignore[no-untyped-def]
    """Add a direction to the sums of a beam of one or two profiles: whole beam, part that meets the sky, sky."""
    intervals = tables.shape[1]
    cell, t = cell_of((first + 1.0) * (0.5 * intervals), intervals)
    c = tables[0, cell]
    if tables.shape[0] == 1:
        for j in range(sums.shape[1]):
            gain = ((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j]
            sums[0, j] += whole * gain
            sums[1, j] += weight * gain
            sums[2, j] += weight * gain * brightness_k[p, j]
    else:
        cell, u = cell_of((second + 1.0) * (0.5 * intervals), intervals)
        d = tables[1, cell]
        for j in range(sums.shape[1]):
            gain = ((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j]
            gain *= ((d[3, j] * u + d[2, j]) * u + d[1, j]) * u + d[0, j]
            sums[0, j] += whole * gain
            sums[1, j] += weight * gain
            sums[2, j] += weight * gain * brightness_k[p, j]


@njit(inline="always")
def add(gain, whole, weight, brightness_k, p, sums):  # type: ignore[no-untyped-def]
    """The same for a beam whose gain towards the direction is at hand."""
    for j in range(len(gain)):
        sums[0, j] += whole * gain[j]
        sums[1, j] += weight * gain[j]
        sums[2, j] += weight * gain[j] * brightness_k[p, j]


@njit(error_model="numpy", fastmath={"contract"})
def product_gain(tables, first, second, gain):  # type: ignore[no-untyped-def]
    """Gain of a beam of one or two profiles at all frequencies."""
    intervals = tables.shape[1]
    cell, t = cell_of((first + 1.0) * (0.5 * intervals), intervals)
    other, u = cell_of((second + 1.0) * (0.5 * intervals), intervals)
    for j in range(len(gain)):
        gain[j] = cubic(tables[0], cell, t, j)
    if tables.shape[0] == 2:
        for j in range(len(gain)):
            gain[j] *= cubic(tables[1], other, u, j)


@njit(inline="always")
def reflected_share(table, cosine, lowest_cosine, column):  # type: ignore[no-untyped-def]
    """What the surface reflects at an incidence."""
    intervals = table.shape[0]
    scaled = (max(cosine, lowest_cosine) - lowest_cosine) * (intervals / (1.0 - lowest_cosine))
    cell, t = cell_of(scaled, intervals)
    return cubic(table, cell, t, column)


@njit(error_model="numpy", fastmath={"contract"})
def visible_weight(n, below, limb, taper_rad, taper, level, horizon, north, east):  # type: ignore[no-untyped-def]
    """Weight of a direction near the limb."""
    if not level:
        limb = 0.5 * np.pi + np.arcsin(horizon_sine(horizon, dot(n, north), dot(n, east)))
    return step((np.arccos(min(max(below, -1.0), 1.0)) - limb) / taper_rad, taper)


@njit(error_model="numpy", fastmath={"contract"})
def image_of(table, scaled):  # type: ignore[no-untyped-def]
    """Where a direction's mirror image is seen, its compression, and its cosine of incidence."""
    cell, t = cell_of(scaled, table.shape[0])
    return cubic(table, cell, t, 0), cubic(table, cell, t, 1), cubic(table, cell, t, 2), cubic(table, cell, t, 3)


@njit(error_model="numpy", fastmath={"contract"})
def squared_sine_of_latitude(n, down, pole, below, sine_limb, sphere):  # type: ignore[no-untyped-def]
    """Where a line of sight meets the body below, and the cosine of incidence there."""
    zenith_pole = -dot(down, pole)
    if not sphere:
        return zenith_pole * zenith_pole, max(below, 0.0)
    inside = min(np.sqrt(max(1.0 - below * below, 0.0)) / sine_limb, 1.0)
    incidence = np.sqrt(1.0 - inside * inside)
    sine = zenith_pole / sine_limb + dot(n, pole) * (max(below, 0.0) / sine_limb - incidence)
    return sine * sine, incidence


@njit(parallel=True, cache=True, error_model="numpy", fastmath={"contract"})
def sum_samples(  # type: ignore[no-untyped-def]
    directions, weights, brightness_k, tables, grid, layout, axes, nadir, north, east, pole, limb_rad,
    cosine_hidden, cosine_clear, taper_rad, taper, level, horizon, mirror_tables, cosine_last,
    reflectivity, lowest_cosine, by_latitude, sphere, sky_k, response, polar, beam_sum,
):  # fmt: skip
    pixels, frequencies = brightness_k.shape
    last = axes.shape[1] - 1
    last_mirror = mirror_tables.shape[0] - 1
    mirror_intervals = mirror_tables.shape[1]
    product, grey = tables.shape[0] > 0, reflectivity.shape[2] == 1
    for s in prange(len(nadir)):
        sums = np.zeros((3, frequencies))
        gain, emitted = np.empty(frequencies), np.zeros(frequencies)
        down, one, two, three = nadir[s], axes[s, 0], axes[s, min(1, last)], axes[s, last]
        one_down, two_down, three_down = dot(one, down), dot(two, down), dot(three, down)
        image = mirror_tables[min(np.int64(s), last_mirror)]
        mirror_scale = mirror_intervals / (cosine_last[s] + 1.0)
        for p in range(pixels):
            x, y, z = directions[p, 0], directions[p, 1], directions[p, 2]
            below = x * down[0] + y * down[1] + z * down[2]
            first = x * one[0] + y * one[1] + z * one[2]
            second = x * two[0] + y * two[1] + z * two[2]
            third = x * three[0] + y * three[1] + z * three[2]
            visible = 1.0
            if below > cosine_hidden[s]:
                visible = 0.0
            elif below > cosine_clear[s]:
                visible = visible_weight(
                    directions[p], below, limb_rad[s], taper_rad, taper, level, horizon, north[s], east[s]
                )
            if product:
                add_product(tables, first, second, weights[p], weights[p] * visible, brightness_k, p, sums)
            else:
                grid_gain(grid, layout, first, second, third, gain)
                add(gain, weights[p], weights[p] * visible, brightness_k, p, sums)
            if by_latitude and visible != 1.0:
                if product:
                    product_gain(tables, first, second, gain)
                squared, incidence = squared_sine_of_latitude(
                    directions[p], down, pole[s], below, np.sin(limb_rad[s]), sphere
                )
                weight = weights[p] * (1.0 - visible) * squared
                for j in range(frequencies):
                    column = min(j, reflectivity.shape[2] - 1)
                    back = reflected_share(reflectivity, incidence, lowest_cosine, column)
                    emitted[j] += weight * (1.0 - back) * gain[j]
            if visible != 0.0 and below < cosine_last[s]:
                along, towards, compression, incidence = image_of(image, (below + 1.0) * mirror_scale)
                first = min(max(along * first + towards * one_down, -1.0), 1.0)
                second = min(max(along * second + towards * two_down, -1.0), 1.0)
                third = min(max(along * third + towards * three_down, -1.0), 1.0)
                weight = weights[p] * visible * compression
                if grey:
                    weight *= reflected_share(reflectivity, incidence, lowest_cosine, 0)
                    if product:
                        add_product(tables, first, second, 0.0, weight, brightness_k, p, sums)
                    else:
                        grid_gain(grid, layout, first, second, third, gain)
                        add(gain, 0.0, weight, brightness_k, p, sums)
                else:
                    if product:
                        product_gain(tables, first, second, gain)
                    else:
                        grid_gain(grid, layout, first, second, third, gain)
                    for j in range(frequencies):
                        gain[j] *= reflected_share(reflectivity, incidence, lowest_cosine, j)
                    add(gain, 0.0, weight, brightness_k, p, sums)
        for j in range(frequencies):
            sky_k[s, j] = sums[2, j] / sums[0, j]
            response[s, j] = sums[1, j] / sums[0, j]
            polar[s, j] = emitted[j] / sums[0, j]
            beam_sum[s, j] = sums[0, j]


@njit(inline="always")
def add_weighted(tables, first, second, weight, share, s, total):  # type: ignore[no-untyped-def]
    """Add a direction of a beam of one or two profiles, weighted by its sample's share."""
    intervals = tables.shape[1]
    cell, t = cell_of((first + 1.0) * (0.5 * intervals), intervals)
    c = tables[0, cell]
    if tables.shape[0] == 1:
        for j in range(len(total)):
            total[j] += weight * share[s, j] * (((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j])
    else:
        cell, u = cell_of((second + 1.0) * (0.5 * intervals), intervals)
        d = tables[1, cell]
        for j in range(len(total)):
            gain = ((c[3, j] * t + c[2, j]) * t + c[1, j]) * t + c[0, j]
            gain *= ((d[3, j] * u + d[2, j]) * u + d[1, j]) * u + d[0, j]
            total[j] += weight * share[s, j] * gain


@njit(parallel=True, cache=True, error_model="numpy", fastmath={"contract"})
def spread_samples(  # type: ignore[no-untyped-def]
    directions, weights, share, tables, grid, layout, axes, nadir, north, east, limb_rad,
    cosine_hidden, cosine_clear, taper_rad, taper, level, horizon, mirror_tables, cosine_last,
    reflectivity, lowest_cosine, mean_beam,
):  # fmt: skip
    """Add to `mean_beam` ndarray[pixel, frequency] what each pixel's brightness counts in the mean of the samples.

    `share` ndarray[time, frequency] is the weight of a sample over the sum of its beam. The
    loops of `sum_samples` the other way round: pixels outside, so that threads do not meet.
    """
    frequencies = share.shape[1]
    last = axes.shape[1] - 1
    last_mirror, mirror_intervals = mirror_tables.shape[0] - 1, mirror_tables.shape[1]
    product, columns = tables.shape[0] > 0, reflectivity.shape[2] - 1
    for p in prange(len(directions)):
        gain, total = np.empty(frequencies), np.zeros(frequencies)
        x, y, z = directions[p, 0], directions[p, 1], directions[p, 2]
        for s in range(len(nadir)):
            below = x * nadir[s, 0] + y * nadir[s, 1] + z * nadir[s, 2]
            if below > cosine_hidden[s]:
                continue
            visible = 1.0
            if below > cosine_clear[s]:
                visible = visible_weight(
                    directions[p], below, limb_rad[s], taper_rad, taper, level, horizon, north[s], east[s]
                )
            first = x * axes[s, 0, 0] + y * axes[s, 0, 1] + z * axes[s, 0, 2]
            b = min(1, last)
            second = x * axes[s, b, 0] + y * axes[s, b, 1] + z * axes[s, b, 2]
            third = x * axes[s, last, 0] + y * axes[s, last, 1] + z * axes[s, last, 2]
            if product:
                add_weighted(tables, first, second, visible, share, s, total)
            else:
                grid_gain(grid, layout, first, second, third, gain)
                for j in range(frequencies):
                    total[j] += share[s, j] * visible * gain[j]
            if below < cosine_last[s]:
                scaled = (below + 1.0) * (mirror_intervals / (cosine_last[s] + 1.0))
                along, towards, compression, incidence = image_of(mirror_tables[min(s, last_mirror)], scaled)
                weight = visible * compression
                down = axes[s, 0, 0] * nadir[s, 0] + axes[s, 0, 1] * nadir[s, 1] + axes[s, 0, 2] * nadir[s, 2]
                first = min(max(along * first + towards * down, -1.0), 1.0)
                down = axes[s, b, 0] * nadir[s, 0] + axes[s, b, 1] * nadir[s, 1] + axes[s, b, 2] * nadir[s, 2]
                second = min(max(along * second + towards * down, -1.0), 1.0)
                down = axes[s, last, 0] * nadir[s, 0] + axes[s, last, 1] * nadir[s, 1] + axes[s, last, 2] * nadir[s, 2]
                third = min(max(along * third + towards * down, -1.0), 1.0)
                if product and columns == 0:
                    weight *= reflected_share(reflectivity, incidence, lowest_cosine, 0)
                    add_weighted(tables, first, second, weight, share, s, total)
                else:
                    if product:
                        product_gain(tables, first, second, gain)
                    else:
                        grid_gain(grid, layout, first, second, third, gain)
                    for j in range(frequencies):
                        back = reflected_share(reflectivity, incidence, lowest_cosine, min(j, columns))
                        total[j] += share[s, j] * weight * back * gain[j]
        for j in range(frequencies):
            mean_beam[p, j] += weights[p] * total[j]
