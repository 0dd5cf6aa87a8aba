"""The light of :mod:`scatterfit.forward.model` as compiled loops.

Sample by sample, class by class: radius, cross sections and their share of every derivative, with
nothing written to memory in between. The array code is the reference; a test compares them.
"""

import math

import numpy as np
from numba import njit

from scatterfit.forward.cloud_state import LARGEST_MOVE, finer_times
from scatterfit.forward.growth_model import setting

# Sums may be taken in another order; what is not a number stays so.
_FAST = {"reassoc", "contract", "arcp", "nsz"}


def load_light():
    """Compile the loops, or load them from where compiled code is kept."""
    def some(*shape):
        return np.ones(shape)

    nodes = (np.arange(2.0), some(1, 2), some(1, 2), some(1, 1, 2))
    mean, mean_by = some(1, 1), some(3, 1, 1)
    _cross_sections(nodes, (some(1), 0, 1), (some(1), some(1), some(1, 1)),
                    (1.0, 1.0, some(1), True), (some(2, 1, 3), 1.0, 1.0, 1.0), (mean, mean_by))
    density, thin = _density((nodes[0], some(2), some(1, 2)), some(1), (some(1), 0, 1.0))
    _channel((mean, mean_by, density, thin), some(1), (0, 0, 0, 1.0, 1.0, 1.0, True, 0, 1.0),
             some(7, 1))


def signals(model, state):
    """Return the shape of every channel and its derivatives.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.
    state : CloudState
        The cloud, with its samples, names and table.

    Returns
    -------
    found : list of tuple
        Shape, shape (n,) [V or -], and derivatives by parameter.
    """
    linear, cloud, names = state.linear, state.cloud, state.names
    time, square, square_rate, by, lone, thinner = linear.stacked
    clock = np.array(state.clock, dtype=float)
    moves = _moves(linear, cloud)
    growing = (float(linear.growth.length[0]), float(linear.growth.start_radius), moves,
               bool(moves.any()))
    table = state.table
    seen = (table.interleaved, float(table.start), float(1.0 / table.step),
            float(cloud.variance - table.variance))
    rows = table.values.shape[0]
    mean = np.zeros((rows, clock.size))
    mean_by = np.zeros((by.shape[0] + 2 if names else 0, rows, clock.size))
    for start, end, finer in state.stretches:
        _cross_sections((time, square, square_rate, by), (clock, start, end),
                        _classes(state, finer), growing, seen, (mean, mean_by))
    number = list(linear.log_radius_by).index("number") if "number" in linear.log_radius_by else -1
    apart = cloud.number - linear.cloud.number - moves[number] if number >= 0 else 0.0
    density, thin = _density((time, lone, thinner), clock, (moves, number, float(apart)))
    return [_signal(model, i, state, (mean, mean_by, density, thin, number))
            for i in range(len(model.channels))]


def _moves(linear, cloud):
    """Return how far each growth parameter is from where growth was solved, shape (p,)."""
    moves = np.array([setting(cloud, name) - setting(linear.cloud, name)
                      for name in linear.log_radius_by], dtype=float)
    for i, name in enumerate(linear.log_radius_by):
        if name == "number":
            moves[i] += cloud.depletion - linear.cloud.depletion
    return moves


def _classes(state, finer):
    """Return births [s], weights, and the matrix from the solved classes, shape (c, f)."""
    growth = state.linear.growth
    if finer is None:
        count = growth.weights.size
        return np.array(growth.birth_times[0]), np.array(growth.weights), np.eye(count)
    return (np.array(finer_times(state.linear, state.births, finer)), np.array(finer.weights),
            np.array(finer.carry.T, order="C"))


def _signal(model, position, state, light):
    """Return one channel's shape and its derivatives by name."""
    mean, mean_by, density, thin, number = light
    channel, names, cloud = model.channels[position], state.names, state.cloud
    angle = channel.angle_row is not None and bool(cloud.angles)
    out = np.zeros((6 + thin.shape[0] if names else 1, density.size))
    _channel((mean, mean_by, density, thin), np.array(state.time, dtype=float), (
        channel.row, channel.dimming_row, channel.angle_row if angle else -1,
        float(cloud.angles[position] if angle else 0.0), float(channel.path),
        float(channel.gain or 1.0),
        channel.kind == "scatter", number, float(channel.time_constant or 0.0)), out)
    if not names:
        return out[0], {}
    growing = [*state.linear.log_radius_by]
    found = dict(zip(growing, out[6:], strict=True))
    found |= {"delay": out[1], "variance": out[2]}
    if channel.angle_row is not None:
        found[f"angle:{position}"] = out[5]
    by = {name: found[name] for name in names if name in found}
    if "number" in names:
        depletion = by.get("number", np.zeros_like(out[0]))
        by |= {"number_gain": out[3], "number_extinction": out[4], "number_depletion": depletion,
               "number": depletion + out[3] + out[4], "depletion": depletion}
    return out[0], by


@njit(cache=True, error_model="numpy")
def _cross_sections(nodes, samples, classes, growing, seen, out):
    """Fill cross sections averaged over the classes and their derivatives.

    Of the two, the first has shape (rows, n); the other, shape (p + 2, rows, n), or (0, ...) where
    none is wanted, holds growth parameters, then the delay, then the variance.

    Derivatives are summed over the finer classes only as far as the solved ones: what a parameter
    does to the radii is known there, and carried from there in straight proportion.
    """
    clock, start, end = samples
    mean, mean_by = out
    births, _, carry = classes
    moves, moved = growing[2], growing[3]
    solved = nodes[1].shape[0]
    derivatives = mean_by.shape[0] > 0
    followed = moves.size if derivatives or moved else 0
    square, rate, move = np.empty(solved), np.empty(solved), np.zeros(solved)
    tracks = np.zeros((moves.size, solved))
    cells, seen_by = np.empty(births.size, np.intp), np.empty((5, births.size))
    by_radius, by_delay = np.empty(solved), np.empty(solved)
    i = 0
    for j in range(start, end):
        i = _at_nodes(nodes, clock[j], i, followed, (square, rate, tracks))
        if moved:
            for c in range(solved):
                move[c] = 0.0
                for k in range(moves.size):
                    move[c] += moves[k] * tracks[k, c]
        born = _radii(clock[j], classes, growing, (square, move), seen, (cells, seen_by))
        for row in range(seen[0].shape[1]):
            mean[row, j], bent = _one_row(seen, row, cells[:born], seen_by)
            if derivatives:
                _by_solved(carry, seen_by, born, (by_radius, by_delay))
                _gathered((tracks, rate), (by_radius, by_delay, bent), mean_by[:, row, j])


@njit(cache=True, error_model="numpy")
def _radii(clock, classes, growing, solved, seen, out):
    """Fill each class's cell of the table, and its place there, weight and answer to the delay.

    Return how many classes, in order of birth, may be born.
    """
    births, weights, carry = classes
    length, start_radius, _, moved = growing
    square, move = solved
    table, log_start, per_step, _ = seen
    cells, seen_by = out
    smallest, least = (start_radius + length) ** 2, math.exp(log_start)
    born = 0
    for f in range(births.size):
        cells[f], seen_by[:3, f] = 0, 0.0
        if not clock > births[f]:
            continue
        inner, farther = 0.0, 0.0
        for c in range(square.size):
            inner += carry[c, f] * square[c]
            farther += carry[c, f] * move[c]
        radius = math.sqrt(max(inner, smallest)) - length
        if moved:
            radius *= math.exp(min(max(farther, -LARGEST_MOVE), LARGEST_MOVE))
        if not radius > 0.0:
            continue
        place = (math.log(max(radius, least)) - log_start) * per_step
        place = min(max(place, 0.0), table.shape[0] - 1 - 1e-9)
        cells[f] = int(place)
        seen_by[0, f], seen_by[1, f] = place - cells[f], weights[f]
        seen_by[2, f] = 1.0 / (-2.0 * (radius + length) * radius)
        born = f + 1
    return born


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _one_row(seen, row, cells, seen_by):
    """Return a mean cross section and its derivative by the variance; fill slopes by ln r."""
    table, _, per_step, wider = seen
    total, bent = 0.0, 0.0
    for f in range(cells.size):
        cell, t, weight = cells[f], seen_by[0, f], seen_by[1, f]
        low, first, bend = table[cell, row, 0], table[cell, row, 1], table[cell, row, 2]
        rise = table[cell + 1, row, 0] - low
        c = first + table[cell + 1, row, 1] - 2.0 * rise
        b = rise - first - c
        bent += weight * (bend + t * (table[cell + 1, row, 2] - bend))
        total += weight * (low + t * (first + t * (b + t * c)))
        slope = weight * per_step * (first + t * (2.0 * b + 3.0 * t * c))
        seen_by[3, f], seen_by[4, f] = slope, slope * seen_by[2, f]
    return total + wider * bent, bent


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _by_solved(carry, seen_by, born, sums):
    """Fill what the solved classes answer for: slopes by ln r, and by (r + l)^2."""
    for c in range(carry.shape[0]):
        plain, late = 0.0, 0.0
        for f in range(born):
            plain += carry[c, f] * seen_by[3, f]
            late += carry[c, f] * seen_by[4, f]
        sums[0][c], sums[1][c] = plain, late


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _gathered(tracks, sums, mean_by):
    """Fill one sample's derivatives, shape (p + 2,), from sums over the classes."""
    growing, rate = tracks
    by_radius, by_delay, bent = sums
    names = growing.shape[0]
    for k in range(names):
        part = 0.0
        for c in range(rate.size):
            part += growing[k, c] * by_radius[c]
        mean_by[k] = part
    part = 0.0
    for c in range(rate.size):
        part += rate[c] * by_delay[c]
    mean_by[names], mean_by[names + 1] = part, bent


@njit(cache=True, error_model="numpy")
def _place(time, clock, i):
    """Return the cell of a time, from the one before, the place in it and its width."""
    while i < time.size - 2 and clock >= time[i + 1]:
        i += 1
    width = time[i + 1] - time[i]
    return i, min(max((clock - time[i]) / width, 0.0), 1.0), width


@njit(cache=True, error_model="numpy")
def _at_nodes(nodes, clock, i, followed, out):
    """Fill (r + l)^2 by cubics and the other tracks by straight lines; return the cell."""
    time, squares, rates, by = nodes
    square, rate, tracks = out
    i, t, width = _place(time, clock, i)
    for c in range(squares.shape[0]):
        low, first, last = squares[c, i], rates[c, i] * width, rates[c, i + 1] * width
        rise = squares[c, i + 1] - low
        cube = first + last - 2.0 * rise
        square[c] = low + t * (first + t * (rise - first - cube + t * cube))
        rate[c] = rates[c, i] + t * (rates[c, i + 1] - rates[c, i])
        for k in range(followed):
            tracks[k, c] = by[k, c, i] + t * (by[k, c, i + 1] - by[k, c, i])
    return i


@njit(cache=True, error_model="numpy")
def _density(nodes, clock, moved):
    """Return droplets per volume, shape (n,), and derivatives of its ln, shape (p, n)."""
    time, lone, thinner = nodes
    moves, number, apart = moved
    density, thin = np.empty(clock.size), np.empty((thinner.shape[0], clock.size))
    i = 0
    for j in range(clock.size):
        i, t, _ = _place(time, clock[j], i)
        change = 0.0
        for k in range(moves.size):
            thin[k, j] = thinner[k, i] + t * (thinner[k, i + 1] - thinner[k, i])
            change += moves[k] * thin[k, j]
        if number >= 0:
            change += apart
        density[j] = (lone[i] + t * (lone[i + 1] - lone[i])) * math.exp(change)
    return density, thin


@njit(cache=True, error_model="numpy")
def _channel(light, time, channel, out):
    """Fill a channel's shape and, after it, its derivatives.

    Those by delay, variance, number through the gain, number through extinction, the channel's
    angle, and each growth parameter.
    """
    mean, mean_by, density, thin = light
    row, dimming, angle_row, angle, path, gain, scatter, number, time_constant = channel
    direct = 1.0 if scatter else 0.0
    growth_names = thin.shape[0]
    for j in range(density.size):
        own = mean[row, j]
        if angle_row >= 0:
            own += angle * mean[angle_row, j]
        depth = density[j] * mean[dimming, j] * path
        light_left = math.exp(-depth)
        bright = gain * density[j] * light_left * direct
        shape = bright * own if scatter else light_left
        dimmed = shape * density[j] * path
        out[0, j] = shape
        if out.shape[0] == 1:
            continue
        for k in range(growth_names + 2):
            change = mean_by[k, row, j]
            if angle_row >= 0 and k <= growth_names:
                change += angle * mean_by[k, angle_row, j]
            part = bright * change - dimmed * mean_by[k, dimming, j]
            if k < growth_names:
                thinner = thin[k, j] - (1.0 if k == number else 0.0)
                out[6 + k, j] = part + shape * thinner * (direct - depth)
            else:
                out[1 + k - growth_names, j] = part
        out[3, j] = shape * direct
        out[4, j] = -shape * depth
        if angle_row >= 0:
            out[5, j] = bright * mean[angle_row, j]
    if time_constant > 0.0:
        _low_pass(time, out, time_constant)


@njit(cache=True, error_model="numpy")
def _low_pass(time, rows, time_constant):
    """Let rows through a first-order low-pass: see :func:`scatterfit.forward.low_pass.low_pass`."""
    keep, share = np.empty(time.size - 1), np.empty(time.size - 1)
    for j in range(time.size - 1):
        h = (time[j + 1] - time[j]) / time_constant
        keep[j] = math.exp(-h)
        share[j] = -math.expm1(-h) / h
    for k in range(rows.shape[0]):
        before = rows[k, 0]
        for j in range(time.size - 1):
            now = rows[k, j + 1]
            rows[k, j + 1] = keep[j] * rows[k, j] + (share[j] - keep[j]) * before + (
                1.0 - share[j]) * now
            before = now
