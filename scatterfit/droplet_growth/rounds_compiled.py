"""The rounds of :mod:`scatterfit.droplet_growth.cloud` as one compiled loop.

Line by line what the array code there does, element after element, so that nothing is written to
memory in between. The array code is the reference; a test compares them.
"""

import math

import numpy as np
from numba import njit

from scatterfit.constants import GAS_CONSTANT

_LARGEST_SURFACE_FRACTION = 0.9
_SMALLEST_FRACTION = 1e-9
_MICROMETRE = 1e-6
_BENT_FROM = 5e-8
_LARGEST_EXPONENT = 40.0
# What is not a number stays so.
_FAST = {"contract", "arcp", "nsz"}


def load_rounds():
    """Compile the loop, or load it from where compiled code is kept."""
    def some(*shape):
        return np.ones(shape)

    table = (1.0, 1.0, some(2, 8))
    time = np.arange(2.0)
    rounds((table, table, 1.0, 1.0), (time, some(2), some(1, 2), some(1), some(1, 2)),
           (1.0, *(some(1) for _ in range(6)), np.zeros((1, 1), np.intp), some(1, 1), some(1)),
           (some(1, 1, 2), some(1, 2), some(1, 2), some(1, 2), some(1, 1, 2)), (1, 1, 1.0))


@njit(cache=True, error_model="numpy")
def rounds(tables, gas, droplets, start, limits):
    """Return the solved cloud: see :func:`scatterfit.droplet_growth.cloud.solve_cloud`.

    Parameters
    ----------
    tables : tuple
        Film and liquid, each a tuple of first temperature [K], cells per kelvin [1/K], and cells,
        shape (n, 2 k): value and rise of each property; then the molar volume [m^3/mol] and the
        heat capacity of the gas [J/(mol K)].
    gas : tuple
        Time [s] and pressure [Pa], shape (m,); undisturbed temperature, shape (v, m) [K]; vapour
        fraction, shape (v,) [-]; creep, shape (v, m) [-].
    droplets : tuple
        Start radius [m]; by variant l [m], droplets over 3 / (4 pi) of the molar volume [1/m^3],
        scale, bend, mass and thermal accommodation [-]; cell of each birth and place within it,
        shape (v, c) [-]; weights, shape (c,) [-].
    start : tuple
        (r + l)^2, shape (v, c, m) [m^2]; condensed, gas temperature [K], vapour fraction, each of
        shape (v, m); droplet temperature, shape (v, c, m) [K]; all are changed.
    limits : tuple
        Most rounds, Newton steps of the first round, tolerance [-].

    Returns
    -------
    found : tuple
        Rate, shape (v, c, m) [m^2/s], and the last change [-]; (r + l)^2 is carried on backwards.
    """
    square, condensed, temperature, share, droplet_temperature = start
    rate, slope = np.empty_like(square), np.empty_like(square)
    since = np.empty_like(square)
    most, steps, tolerance = limits
    moved = np.inf
    for _ in range(most):
        _rates(tables, gas, droplets, (square, temperature, share, droplet_temperature, steps),
               (rate, slope))
        _since_birth(rate, gas[0], (droplets[7], droplets[8]), since)
        inner = _taken(gas, droplets, (since, slope), condensed)
        moved = _moved(droplets, since, inner, square)
        _gas_state(tables, gas, condensed, (temperature, share))
        steps = 1
        if moved < tolerance:
            break
    for v in range(square.shape[0]):
        floor = (droplets[0] + droplets[1][v]) ** 2
        for c in range(square.shape[1]):
            for j in range(square.shape[2]):
                if since[v, c, j] <= 0.0:
                    square[v, c, j] = floor + since[v, c, j]
    return rate, moved


@njit(cache=True, error_model="numpy", inline="always")
def _cell(table, temperature):
    """Return the cell of a temperature and the place in it."""
    place = (temperature - table[0]) * table[1]
    # What is not a number must not become an index.
    place = min(place, table[2].shape[0] - 1e-9) if place > 0.0 else 0.0
    cell = int(place)
    return cell, place - cell


@njit(cache=True, error_model="numpy", fastmath=_FAST, inline="always")
def _fluxes(tables, gas, droplet, resistances):
    """Return flow, conduction, vapour flux, latent heat and d(y_s)/dT of one droplet.

    See :func:`scatterfit.droplet_growth.single_droplet.growth_rate`.
    """
    film, liquid = tables
    own, warm, far, log_pressure = gas
    radius, thinness = droplet
    vapour_resistance, heat_resistance = resistances
    cell, t = _cell(film, 0.5 * (own + warm))
    row = film[2][cell]
    kn = (row[4] + t * row[5]) * thinness
    flow = (row[0] + t * row[1]) * (1.0 + kn) / (
        1.0 + kn * (vapour_resistance + 0.377 + vapour_resistance * kn))
    kn = (row[6] + t * row[7]) * (thinness * warm)
    conduction = (row[2] + t * row[3]) * (1.0 + kn) / (
        1.0 + kn * (heat_resistance + 0.377 + heat_resistance * kn))
    cell, t = _cell(liquid, own)
    row = liquid[2][cell]
    latent = row[2] + t * row[3]
    inverse = 1.0 / own
    surface = math.exp(
        row[0] + t * row[1] + (row[4] + t * row[5]) * inverse / radius - log_pressure)
    surface = min(surface, _LARGEST_SURFACE_FRACTION)
    flux = flow * (math.log(1.0 - surface) - far)
    slope = surface / (1.0 - surface) * latent * inverse * (inverse / GAS_CONSTANT)
    return flow, conduction, flux, latent, slope


@njit(cache=True, error_model="numpy", fastmath=_FAST)
def _rates(tables, gas, droplets, here, out):
    """Fill d(r + l)^2/dt and d(rate)/dq; improve the droplets' temperatures."""
    film, liquid, molar_volume, heat_capacity = tables
    _, pressure, _, _, creep = gas
    _, length, _, scale, bend, mass, thermal, _, _, _ = droplets
    square, temperature, share, droplet_temperature, steps = here
    rate, slope = out
    bent = np.any(bend != 0.0)
    log_pressure = np.log(pressure)
    variants, classes, nodes = square.shape
    for v in range(variants):
        vapour_resistance = (4.0 / 3.0) / mass[v]
        heat_resistance = (4.0 / 3.0) / thermal[v]
        for j in range(nodes):
            warm = temperature[v, j]
            far = math.log(1.0 - share[v, j])
            cell, t = _cell(liquid, warm)
            warming = (liquid[2][cell, 2] + t * liquid[2][cell, 3]) / heat_capacity
            for c in range(classes):
                root = math.sqrt(square[v, c, j])
                radius = root - length[v]
                own = droplet_temperature[v, c, j]
                thinness = 1.0 / (pressure[j] * radius)
                for _ in range(steps):
                    flow, conduction, flux, latent, surface_slope = _fluxes(
                        (film, liquid), (own, warm, far, log_pressure[j]), (radius, thinness),
                        (vapour_resistance, heat_resistance))
                    loss = latent * flow * surface_slope
                    change = (latent * flux - conduction * (own - warm)) / (conduction + loss)
                    own += change
                droplet_temperature[v, c, j] = own
                per_flux = molar_volume / radius
                factor = (2.0 * scale[v]) * root
                by_vapour = per_flux * flow * conduction / (conduction + loss)
                slope[v, c, j] = -factor * by_vapour * (1.0 + surface_slope * warming)
                found = (flux - flow * surface_slope * change) * per_flux * factor * creep[v, j]
                if bent:
                    found *= math.exp(bend[v] * math.log(max(radius, _BENT_FROM) / _MICROMETRE))
                rate[v, c, j] = found


@njit(cache=True, error_model="numpy")
def _since_birth(rate, time, place, since):
    """Fill the integral of a rate from each class's birth on."""
    cells, within = place
    variants, classes, nodes = rate.shape
    for v in range(variants):
        for c in range(classes):
            total = 0.0
            since[v, c, 0] = 0.0
            for j in range(nodes - 1):
                total += 0.5 * (time[j + 1] - time[j]) * (rate[v, c, j + 1] + rate[v, c, j])
                since[v, c, j + 1] = total
            cell, t = cells[v, c], within[v, c]
            low, high = rate[v, c, cell], rate[v, c, cell + 1]
            before = since[v, c, cell] + (time[cell + 1] - time[cell]) * t * (
                low + 0.5 * t * (high - low))
            for j in range(nodes):
                since[v, c, j] -= before


@njit(cache=True, error_model="numpy")
def _taken(gas, droplets, grown, condensed):
    """Return by how much less is grown as vapour is taken, (v, m); update what has condensed."""
    time, _, _, fraction, _ = gas
    start_radius, length, moles, _, _, _, _, _, _, weights = droplets
    since, slope = grown
    variants, classes, nodes = since.shape
    error, gain = np.empty((variants, nodes)), np.empty((variants, nodes))
    response = np.empty((variants, nodes))
    for v in range(variants):
        floor = (start_radius + length[v]) ** 2
        for j in range(nodes):
            cubes, gained, answered = 0.0, 0.0, 0.0
            for c in range(classes):
                ahead = since[v, c, j]
                root = math.sqrt(floor + max(ahead, 0.0))
                radius = root - length[v]
                cubes += weights[c] * radius**3
                if ahead > 0.0:
                    gained += weights[c] * radius**2 / root
                    answered += weights[c] * slope[v, c, j]
            error[v, j] = moles[v] * (cubes - start_radius**3) - condensed[v, j]
            gain[v, j] = 1.5 * moles[v] * gained
            response[v, j] = answered
    inner = _coupled(error, gain, response, time)
    for v in range(variants):
        for j in range(nodes):
            new = condensed[v, j] + error[v, j] + gain[v, j] * inner[v, j]
            condensed[v, j] = min(max(new, 0.0), 0.999 * fraction[v])
    return inner


@njit(cache=True, error_model="numpy")
def _coupled(error, gain, response, time):
    """Return u with u' = response (error + gain u), u = 0 at the start, shape (v, m)."""
    variants, nodes = error.shape
    inner, faded = np.zeros_like(error), np.zeros_like(error)
    lowest = 0.0
    for v in range(variants):
        for j in range(nodes - 1):
            both = gain[v, j] * response[v, j] + gain[v, j + 1] * response[v, j + 1]
            faded[v, j + 1] = faded[v, j] + 0.5 * (time[j + 1] - time[j]) * both
            # A fading that is not a number fails the comparison below, as it should.
            lowest = faded[v, j + 1] if not faded[v, j + 1] >= lowest else lowest
    if lowest > -_LARGEST_EXPONENT:
        for v in range(variants):
            total, before = 0.0, response[v, 0] * error[v, 0]
            for j in range(nodes - 1):
                after = response[v, j + 1] * error[v, j + 1] * math.exp(-faded[v, j + 1])
                total += 0.5 * (time[j + 1] - time[j]) * (before + after)
                inner[v, j + 1] = total * math.exp(faded[v, j + 1])
                before = after
        return inner
    for v in range(variants):
        for j in range(nodes - 1):
            half = 0.5 * (time[j + 1] - time[j])
            damping = gain[v, j] * response[v, j]
            top = inner[v, j] * (1.0 + half * max(damping, -1.0 / half))
            top += half * (response[v, j] * error[v, j] + response[v, j + 1] * error[v, j + 1])
            inner[v, j + 1] = top / (1.0 - half * gain[v, j + 1] * response[v, j + 1])
    return inner


@njit(cache=True, error_model="numpy")
def _moved(droplets, since, inner, square):
    """Update (r + l)^2 and return the largest relative change."""
    start_radius, length = droplets[0], droplets[1]
    largest = 0.0
    for v in range(square.shape[0]):
        floor = (start_radius + length[v]) ** 2
        for c in range(square.shape[1]):
            for j in range(square.shape[2]):
                new = floor + since[v, c, j]
                if since[v, c, j] > 0.0:
                    new += inner[v, j]
                # What is not a number stays so, and is never called solved.
                new = floor if new < floor else new
                change = abs(new - square[v, c, j]) / new
                if change > largest or math.isnan(change):
                    largest = change
                square[v, c, j] = new
    return largest


@njit(cache=True, error_model="numpy")
def _gas_state(tables, gas, condensed, state):
    """Update temperature and vapour fraction of the gas from what has condensed."""
    _, liquid, _, heat_capacity = tables
    undisturbed, fraction = gas[2], gas[3]
    temperature, share = state
    for v in range(condensed.shape[0]):
        heat, before = 0.0, 0.0
        for j in range(condensed.shape[1]):
            warm = temperature[v, j]
            cell, t = _cell(liquid, warm)
            latent = liquid[2][cell, 2] + t * liquid[2][cell, 3]
            half = latent / heat_capacity * (0.5 / warm)
            if j == 0:
                heat = 2.0 * half * condensed[v, 0]
            else:
                heat += (half + before) * (condensed[v, j] - condensed[v, j - 1])
            before = half
            temperature[v, j] = undisturbed[v, j] * math.exp(heat)
            left = (fraction[v] - condensed[v, j]) / (1.0 - condensed[v, j])
            share[v, j] = max(left, _SMALLEST_FRACTION)
