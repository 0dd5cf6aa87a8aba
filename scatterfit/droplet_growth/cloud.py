"""Radius against time for a cloud: classes of droplets that share one gas.

The unknown is not stepped through time but solved at all its nodes at once: rates are evaluated
for every class, node and variant together, integrated, and the result is fed back until it stands
still. In (r + l)^2 growth is nearly a straight line, so a few rounds do. What couples the
droplets, the vapour they take and the heat they give, is linearised and solved as one scalar
equation a round (Newton's method for integral equations), which also holds in thick clouds that
relax much faster than the nodes are apart.
"""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.compiled import compiled
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.properties import horner, mean_speed
from scatterfit.droplet_growth.single_droplet import growth_rate

_ROUNDS = 80
SOLVED = 2e-6
"""Change of (r + l)^2 in a round at which a cloud counts as solved [-]."""
_SERVES = 1e-3
_SMALLEST_FRACTION = 1e-9
_MICROMETRE = 1e-6
_BENT_FROM = 5e-8
_LARGEST_EXPONENT = 40.0
_TYPICAL_RATE = 4e-11


@dataclass(frozen=True)
class CloudParameters:
    """What may differ between variants of one pulse; arrays broadcast to shape (v,)."""

    droplets_per_mole: np.ndarray
    """Droplets per mole of moist gas [1/mol]."""
    growth_scale: np.ndarray
    """Factor on dr/dt [-]."""
    mass_accommodation: np.ndarray
    """[-]."""
    thermal_accommodation: np.ndarray
    """[-]."""
    vapour_fraction: np.ndarray
    """Mole fraction of vapour before condensation [-]."""
    temperature_factor: np.ndarray
    """Undisturbed temperature over that of the gas path [-]."""
    growth_bend: np.ndarray | float = 0.0
    """Exponent b of a further factor (r / 1 um)^b on dr/dt: error in the law's shape [-]."""
    growth_creep: np.ndarray | float = 0.0
    """c of a further factor exp(c s), s from 0 to 1 along the path: conditions that creep [-]."""

    def columns(self):
        """Return the fields as arrays of shape (v,)."""
        return np.broadcast_arrays(
            *(np.atleast_1d(np.asarray(value, dtype=float)) for value in (
                self.droplets_per_mole, self.growth_scale, self.mass_accommodation,
                self.thermal_accommodation, self.vapour_fraction, self.temperature_factor,
                self.growth_bend, self.growth_creep,
            ))
        )


@dataclass(frozen=True)
class CloudGrowth:
    """A solved cloud, for v variants, c classes and m nodes."""

    time: np.ndarray
    """Nodes, shape (m,) [s]."""
    square: np.ndarray
    """(r + l)^2, the variable in which growth is smooth, shape (v, c, m) [m^2]; before its birth
    a class is carried on backwards, so that it stays smooth there too."""
    square_rate: np.ndarray
    """Its time derivative, shape (v, c, m) [m^2/s]."""
    length: np.ndarray
    """l, shape (v,) [m]."""
    start_radius: float
    """Radius at birth [m]."""
    birth_times: np.ndarray
    """Shape (v, c) [s]."""
    weights: np.ndarray
    """Share of droplets a class, shape (c,) [-]."""
    condensed: np.ndarray
    """Moles condensed per mole of moist gas, shape (v, m) [-]."""
    temperature: np.ndarray
    """Of the gas, shape (v, m) [K]."""
    vapour_fraction: np.ndarray
    """Of the gas, shape (v, m) [-]."""
    droplet_temperature: np.ndarray
    """Shape (v, c, m) [K]."""
    pressure: np.ndarray
    """Shape (m,) [Pa]."""
    droplets_per_mole: np.ndarray
    """Shape (v,) [1/mol]."""
    converged: bool
    """Whether the last round changed (r + l)^2 by less than one part in a thousand."""

    @property
    def radius(self):
        """Radius at the nodes, shape (v, c, m) [m]."""
        length = self.length[:, None, None]
        return np.sqrt(np.maximum(self.square, (self.start_radius + length) ** 2)) - length

    @property
    def number_density(self):
        """Droplets per volume at the nodes, shape (v, m) [1/m^3]."""
        moles = self.pressure / (GAS_CONSTANT * self.temperature * (1.0 - self.condensed))
        return self.droplets_per_mole[:, None] * moles

    def variant(self, index):
        """Return one variant alone."""
        part = slice(index, index + 1)
        return replace(
            self, square=self.square[part], square_rate=self.square_rate[part],
            length=self.length[part], birth_times=self.birth_times[part],
            condensed=self.condensed[part], temperature=self.temperature[part],
            vapour_fraction=self.vapour_fraction[part],
            droplet_temperature=self.droplet_temperature[part],
            droplets_per_mole=self.droplets_per_mole[part],
        )


def solve_cloud(  # noqa: PLR0913  (each argument is a source of its own)
    properties, path, births, parameters, start_radius=3e-9, *, start=None, tolerance=SOLVED,
):
    """Return how a cloud grows.

    Parameters
    ----------
    properties : GrowthProperties
        Of the pulse.
    path : GasPath
        The undisturbed gas, m nodes.
    births : tuple of ndarray
        Times, shape (c,) or (v, c) [s], and weights, shape (c,) [-], of the classes.
    parameters : CloudParameters
        One or more variants.
    start_radius : float
        Radius at birth [m].
    start : CloudGrowth, optional
        A guess on the same nodes, for one variant or all, to start from.
    tolerance : float
        Change of (r + l)^2 in a round that ends the rounds [-].

    Returns
    -------
    cloud : CloudGrowth
        The solution for all variants.
    """
    weights = births[1]
    cloud = _Cloud(properties, path, births, parameters, start_radius)
    square, condensed, warmth = _first_guess(path, cloud.times, cloud.floor, cloud.length, start)
    temperature, share = cloud.gas.state(condensed, cloud.gas.undisturbed)
    if start is not None:
        temperature, share = cloud.gas.state(condensed, temperature)
    droplet_temperature = temperature[:, None, :] + warmth
    steps = 3 if start is None else 1
    rounds = _compiled_rounds if compiled() else _rounds
    solved = rounds(cloud, square, (condensed, temperature, share, droplet_temperature),
                    (_ROUNDS, steps, tolerance))
    square, rate, (condensed, temperature, share, droplet_temperature), moved = solved
    return CloudGrowth(
        time=path.time, square=square, square_rate=rate,
        length=cloud.length[:, 0, 0], start_radius=start_radius, birth_times=cloud.times,
        weights=weights, condensed=condensed, temperature=temperature, vapour_fraction=share,
        droplet_temperature=droplet_temperature, pressure=path.pressure,
        droplets_per_mole=cloud.number, converged=bool(moved < _SERVES),
    )


def _rounds(cloud, square, state, limits):
    """Return (r + l)^2, its rate, the state and the last change after the rounds."""
    condensed, temperature, share, droplet_temperature = state
    most, steps, tolerance = limits
    for _ in range(most):
        radius = np.sqrt(square) - cloud.length
        rate, droplet_temperature, slope = cloud.rate(
            radius, (temperature, share), droplet_temperature, steps
        )
        since = _since_birth(rate, cloud.step, cloud.place)
        grown = np.maximum(since, 0.0)
        alive = grown > 0.0
        inner, condensed = cloud.taken(cloud.floor + grown, alive, slope, condensed)
        moving = np.where(alive, inner[:, None, :], 0.0)
        new_square = np.maximum(cloud.floor + grown + moving, cloud.floor)
        moved = np.max(np.abs(new_square - square) / new_square)
        square, steps = new_square, 1
        temperature, share = cloud.gas.state(condensed, temperature)
        if moved < tolerance:
            break
    square = np.where(alive, square, cloud.floor + since)
    return square, rate, (condensed, temperature, share, droplet_temperature), moved


def _compiled_rounds(cloud, square, state, limits):
    """Return what ``_rounds`` does."""
    from scatterfit.droplet_growth.rounds_compiled import rounds  # noqa: PLC0415  (loads numba)

    def fresh(values, shape=None):
        values = values if shape is None else np.broadcast_to(values, shape)
        return np.array(values, dtype=float, order="C")

    p, path = cloud.properties, cloud.path
    one = fresh(cloud.fraction[:, 0]).shape
    many = (*one, path.time.size)
    condensed, temperature, share, droplet_temperature = (fresh(values) for values in state)
    square = fresh(square, droplet_temperature.shape)
    rate, moved = rounds(
        (p.film.interleaved, p.liquid.interleaved, float(p.molar_volume), float(p.heat_capacity)),
        (fresh(path.time), fresh(path.pressure), fresh(cloud.gas.undisturbed, many),
         fresh(cloud.fraction[:, 0]), fresh(cloud.creep, (one[0], 1, many[1]))[:, 0]),
        (float(cloud.start_radius), fresh(cloud.length[:, 0, 0]), fresh(cloud.moles[:, 0]),
         fresh(cloud.scale[:, 0, 0]), fresh(cloud.bend[:, 0, 0]),
         *(fresh(a[:, 0, 0]) for a in cloud.accommodation), *(np.array(x) for x in cloud.place),
         fresh(cloud.weights)),
        (square, condensed, temperature, share, droplet_temperature), limits,
    )
    return square, rate, (condensed, temperature, share, droplet_temperature), moved


class _Cloud:
    """What stays the same from round to round, with arrays shaped to broadcast."""

    def __init__(self, properties, path, births, parameters, start_radius):
        number, scale, mass, thermal, fraction, factor, bend, creep = parameters.columns()
        times, self.weights = births
        self.properties, self.path, self.number = properties, path, number
        self.start_radius = start_radius
        self.times = np.broadcast_to(times, (number.size, self.weights.size))
        self.length = _typical_length(properties, path, mass)[:, None, None]
        self.floor = (start_radius + self.length) ** 2
        self.moles = (4.0 * np.pi / 3.0 / properties.molar_volume) * number[:, None]
        self.accommodation = (mass[:, None, None], thermal[:, None, None])
        self.scale, self.bend = scale[:, None, None], bend[:, None, None]
        along = (path.time - path.time[0]) / (path.time[-1] - path.time[0])
        self.creep = np.exp(creep[:, None, None] * along) if creep.any() else 1.0
        self.fraction = fraction[:, None]
        self.gas = _Gas(properties, path, fraction, factor)
        self.place = _birth_cells(path.time, self.times)
        self.step = np.diff(path.time)

    def rate(self, radius, gas, droplet_temperature, steps):
        """Return d(r + l)^2/dt, the droplets' temperature, and d(rate)/dq at fixed radius."""
        temperature, share = gas
        speed, droplet_temperature, by_vapour, surface_slope = growth_rate(
            self.properties, radius,
            (temperature[:, None, :], self.path.pressure, share[:, None, :]),
            self.accommodation, droplet_temperature, steps=steps,
        )
        factor = (2.0 * self.scale) * (radius + self.length)
        slope = -factor * by_vapour * (
            1.0 + surface_slope * self.gas.warming(temperature)[:, None, :]
        )
        rate = speed * factor * self.creep
        if self.bend.any():
            bent = np.log(np.maximum(radius, _BENT_FROM) / _MICROMETRE)
            rate *= np.exp(self.bend * bent)
        return rate, droplet_temperature, slope

    def taken(self, square, alive, slope, condensed):
        """Return by how much less is grown as vapour is taken, (v, m), and what has condensed.

        Newton's method for the integral equation of what has condensed.
        """
        root = np.sqrt(square)
        radius = root - self.length
        cubes = np.einsum("c,vcm->vm", self.weights, radius**3) - self.start_radius**3
        error = self.moles * cubes - condensed
        gain = np.where(alive, radius**2 / root, 0.0)
        gain = 1.5 * self.moles * np.einsum("c,vcm->vm", self.weights, gain)
        response = np.einsum("c,vcm->vm", self.weights, np.where(alive, slope, 0.0))
        inner = _coupled(error, gain, response, self.step)
        condensed = np.clip(condensed + error + gain * inner, 0.0, 0.999 * self.fraction)
        return inner, condensed


def _first_guess(path, times, floor, length, start):
    """Return where to start: (r + l)^2, what has condensed, and how warm the droplets are."""
    shape = (*times.shape, path.time.size)
    if start is None:
        square = floor + _TYPICAL_RATE * np.maximum(path.time - times[:, :, None], 0.0)
        return square, np.zeros((shape[0], shape[2])), np.zeros(shape)
    warmth = start.droplet_temperature[0] - start.temperature[0]
    square = np.maximum((start.radius + length) ** 2, floor)
    condensed = np.broadcast_to(start.condensed, (shape[0], shape[2])).copy()
    return square, condensed, np.broadcast_to(warmth, shape)


class _Gas:
    """State of the gas as a function of what has condensed."""

    def __init__(self, properties, path, fraction, factor):
        self.properties = properties
        self.fraction = fraction[:, None]
        self.undisturbed = path.temperature * factor[:, None]

    def warming(self, temperature):
        """Return by how much the gas warms per mole condensed per mole of gas, (v, m) [K]."""
        p = self.properties
        return p.latent.at(temperature) / p.heat_capacity

    def state(self, condensed, warmed):
        """Return temperature [K] and vapour mole fraction [-], shape (v, m).

        From cp dT = R T dp/p + L dq: the heat enters as a factor exp(sum of L dq / (cp T)), in
        which T is that of the round before.
        """
        half = self.warming(warmed)
        half *= 0.5 / warmed
        heat = np.zeros_like(condensed)
        np.cumsum((half[:, 1:] + half[:, :-1]) * (condensed[:, 1:] - condensed[:, :-1]), axis=1,
                  out=heat[:, 1:])
        heat += 2.0 * half[:, :1] * condensed[:, :1]
        temperature = self.undisturbed * np.exp(heat, out=heat)
        share = (self.fraction - condensed) / (1.0 - condensed)
        return temperature, np.maximum(share, _SMALLEST_FRACTION)


def _typical_length(properties, path, accommodation):
    """Return the length [m] that makes (r + l)^2 grow nearly straight, shape (v,)."""
    temperature = path.reference_temperature
    film = properties.scaled(np.asarray(temperature))
    diffusivity = horner(properties.diffusivity_of, film) * temperature / path.reference_pressure
    mean_free_path = 3.0 * diffusivity / mean_speed(temperature, properties.vapour_molar_mass)
    return (4.0 / (3.0 * accommodation) - 0.4) * mean_free_path


def _birth_cells(time, births):
    """Return the cell that holds each birth and how far into it the birth falls, shape (v, c)."""
    cell = np.clip(np.searchsorted(time, births, side="right") - 1, 0, time.size - 2)
    within = (births - time[cell]) / (time[cell + 1] - time[cell])
    return cell, np.clip(within, 0.0, 1.0)


def _since_birth(rate, step, place):
    """Return the integral of a rate from each class's birth on, shape (v, c, m)."""
    total = np.zeros_like(rate)
    np.cumsum(0.5 * step * (rate[..., 1:] + rate[..., :-1]), axis=-1, out=total[..., 1:])
    cell, within = place
    index = cell[..., None]
    low = np.take_along_axis(rate, index, -1)[..., 0]
    high = np.take_along_axis(rate, index + 1, -1)[..., 0]
    before = np.take_along_axis(total, index, -1)[..., 0]
    before = before + step[cell] * within * (low + 0.5 * within * (high - low))
    return total - before[..., None]


def _coupled(error, gain, response, step):
    """Return u with u' = response (error + gain u), u = 0 at the start, shape (v, m)."""
    damping = gain * response
    drive = response * error
    inner = np.zeros_like(error)
    half = 0.5 * step
    faded = np.zeros_like(error)
    np.cumsum(half * (damping[:, 1:] + damping[:, :-1]), axis=1, out=faded[:, 1:])
    if faded.min() > -_LARGEST_EXPONENT:
        scaled = drive * np.exp(-faded)
        np.cumsum(half * (scaled[:, 1:] + scaled[:, :-1]), axis=1, out=inner[:, 1:])
        return inner * np.exp(faded)
    # Clouds that relax many times over would overflow that way: node by node instead.
    for j in range(step.size):
        top = inner[:, j] * (1.0 + half[j] * np.maximum(damping[:, j], -1.0 / half[j]))
        top = top + half[j] * (drive[:, j] + drive[:, j + 1])
        inner[:, j + 1] = top / (1.0 - half[j] * damping[:, j + 1])
    return inner
