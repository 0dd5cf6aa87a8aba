"""A second simulator for the studies: own equations of growth, births and light.

It shares with scatterfit the tables of properties (times random factors) and the Mie series of one
droplet, nothing else. Droplets are many discrete classes stepped through time by
``scipy.integrate.solve_ivp``; each class keeps its own temperature. The cone is summed over
directions about its axis by brute force, the spread over thousands of exact radii.
"""

from dataclasses import dataclass

import numpy as np
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline
from scipy.signal import lfilter

from scatterfit import matter
from scatterfit.cloud_optics.single_droplet import scatter

R = 8.314462618
KB = 1.380649e-23
NA = 6.02214076e23
FIRST_RADIUS = 3e-9
CLASSES = 48
COLDEST = 213.0
SUBCLASSES = 240
SIZE_STEP = 0.001
"""Of the size parameter: resonances are narrow, and 0.004 leaves errors of a percent."""


@dataclass(frozen=True)
class Nature:
    """What nature does, beyond what the chamber file says."""

    scale: float = 1.0
    accommodation: float = 1.0
    bend: float = 0.0
    spread: float = 0.003
    diffusivity: float = 1.0
    conductivity: float = 1.0
    saturation: float = 1.0
    barrier: float = 1.0
    rate: float = 1.0
    creep: float = 0.0
    index_shift: float = 0.0


class Properties:
    """Properties of a pulse as polynomials of temperature, quick to evaluate."""

    def __init__(self, substance, gas, fraction, nature):
        grid = np.linspace(205.0, 335.0, 80)
        self.fit = lambda y: np.polynomial.Chebyshev.fit(grid, y, 9)
        self.log_pressure = self.fit(
            np.log(np.array(substance.saturation_pressure(grid)) * nature.saturation))
        self.latent = self.fit(substance.latent_heat(grid))
        self.tension = self.fit(substance.surface_tension(grid))
        self.density = self.fit(substance.density(grid))
        self.diffusivity = self.fit(
            np.array(matter.diffusivity(substance, gas)(grid)) * nature.diffusivity)
        self.conductivity = self.fit(np.array(
            [float(matter.moist_conductivity(gas, substance, fraction, t)) for t in grid])
            * nature.conductivity)
        self.heat_capacity = self.fit(np.array(
            [float(matter.moist_heat_capacity(gas, substance, fraction, t)) for t in grid]))
        self.molar_mass = substance.molar_mass
        self.adiabats = {}
        self.gas_mass = float(matter.moist_molar_mass(gas, substance, fraction))


def smooth_step(x):
    """Return a step from 0 to 1 without corners (quintic)."""
    x = np.clip(x, 0.0, 1.0)
    return x**3 * (10.0 + x * (6.0 * x - 15.0))


def pressure_at(time, levels, hold, creep):
    """Return the pressure of the expansion, its hold and the recompression [Pa]."""
    before, low, after = levels
    start, fall, rise = 4.2e-3, 3.6e-3, 3e-4
    end = start + fall + hold
    p = before + (low - before) * smooth_step((time - start) / fall)
    late = np.maximum(time - end - rise, 0.0)
    return p + (after - low) * smooth_step((time - end) / rise) + (
        after * creep * -np.expm1(-late / 0.06))


def temperature_path(props, pressure, start_temperature):
    """Return the temperature without droplets along a pressure, heat capacity varying [K]."""
    log_p = np.log(pressure)
    key = (float(pressure[0]), start_temperature)
    if key not in props.adiabats:
        ends = (log_p[0] - 1.6, log_p[0] + 0.02)
        legs = [solve_ivp(lambda _, t: R * t / props.heat_capacity(t), (log_p[0], end),
                          [start_temperature], rtol=1e-10, atol=1e-8, dense_output=True)
                for end in ends]
        grid = np.linspace(*ends, 4000)
        warmth = np.where(grid <= log_p[0], legs[0].sol(np.minimum(grid, log_p[0]))[0],
                          legs[1].sol(np.maximum(grid, log_p[0]))[0])
        props.adiabats[key] = CubicSpline(grid, warmth)
    return props.adiabats[key](log_p)


def log_nucleation_rate(props, temperature, pressure, fraction, nature):
    """Return ln of a rate of classical form, its barrier and size nature's own."""
    saturated = np.exp(props.log_pressure(temperature))
    ratio = np.log(np.maximum(fraction * pressure / saturated, 1.0 + 1e-9))
    volume = props.molar_mass / props.density(temperature) / NA
    tension = props.tension(temperature)
    thermal = KB * temperature
    barrier = 16.0 * np.pi / 3.0 * tension**3 * volume**2 / (thermal**3 * ratio**2)
    monomers = fraction * pressure / thermal
    front = np.sqrt(2.0 * tension * NA / (np.pi * props.molar_mass)) * volume * monomers**2
    value = np.log(front) - ratio - nature.barrier * barrier + np.log(nature.rate)
    return np.where(ratio > 0.05, value, -1e4)


def droplet_flux(props, radius, droplet_temperature, gas, nature):
    """Return moles a second into each droplet and its balanced temperature."""
    temperature, pressure, fraction = gas
    td = droplet_temperature
    alpha = nature.accommodation
    for _ in range(12):
        film = 0.5 * (td + temperature)
        speed = np.sqrt(8.0 * R * film / (np.pi * props.molar_mass))
        gas_speed = np.sqrt(8.0 * R * film / (np.pi * props.gas_mass))
        diffusivity = props.diffusivity(film) * 101325.0 / pressure
        conductivity = props.conductivity(film)
        kn = 3.0 * diffusivity / speed / radius
        kt = 3.0 * conductivity * R * temperature / (
            pressure * gas_speed * (props.heat_capacity(film) - 0.5 * R)) / radius
        beta_m = (1 + kn) / (1 + (4 / (3 * alpha) + 0.377) * kn + 4 / (3 * alpha) * kn**2)
        beta_t = (1 + kt) / (1 + (4 / 3 + 0.377) * kt + 4 / 3 * kt**2)
        volume = props.molar_mass / props.density(td)
        curvature = np.minimum(2.0 * props.tension(td) * volume / (R * td * radius), 8.0)
        surface = np.exp(props.log_pressure(td) + curvature) / pressure
        surface = np.minimum(surface, 0.9)
        flow = 4.0 * np.pi * radius * beta_m * diffusivity * pressure / (R * film)
        flux = flow * (np.log1p(-surface) - np.log1p(-fraction))
        latent = props.latent(td)
        heat = 4.0 * np.pi * radius * beta_t * conductivity
        slope = flow * surface / (1 - surface) * latent / (R * td**2)
        change = (latent * flux - heat * (td - temperature)) / (heat + latent * slope)
        # Trial steps of the solver may ask for impossible droplets: keep them finite.
        td = np.clip(td + np.clip(change, -8.0, 8.0), 190.0, 340.0)
        if np.max(np.abs(change)) < 1e-7:
            break
    return flux, td, volume


@dataclass(frozen=True)
class Cloud:
    """A cloud stepped through time."""

    time: np.ndarray
    radius: np.ndarray
    """Per class, zero before birth, shape (c, n) [m]."""
    median: np.ndarray
    """Radius of the median-age droplet, shape (n,) [m]."""
    density: np.ndarray
    """Droplets per volume, shape (n,) [1/m^3]."""
    births: np.ndarray
    truth: dict


def grow(props, time, state, number, nature):
    """Return the cloud of a pulse.

    ``state``: start temperature [K], levels [Pa], hold [s], vapour fraction. The level of the hold
    is found by bisection so that ``number`` droplets per volume are born.
    """
    start_temperature, (before, after), hold, fraction = state
    fine = np.arange(time[0], 9.5e-3 + 1.3 * hold, 2e-6)

    def born(low):
        p = pressure_at(fine, (before, low, after), hold, nature.creep)
        t = temperature_path(props, p, start_temperature)
        rate = np.exp(log_nucleation_rate(props, t, p, fraction, nature))
        settled = pressure_at(time[time > 0.5 * (time[0] + time[-1])],
                              (before, low, after), hold, nature.creep)
        reference = float(np.median(settled))
        warmth = float(temperature_path(
            props, np.array([before, reference]), start_temperature)[1])
        thin = (reference / warmth) / (p / t)
        return p, t, rate, np.cumsum(rate * thin) * 2e-6, reference, warmth

    coldest = float(props.heat_capacity(230.0)) / R * np.log(COLDEST / start_temperature)
    high, low = np.log(0.995 * after), np.log(before) + coldest
    wanted = max(number, 1e3)
    if born(np.exp(low))[3][-1] < wanted or born(np.exp(high))[3][-1] > wanted:
        return None
    for _ in range(34):
        middle = 0.5 * (low + high)
        if born(np.exp(middle))[3][-1] > wanted:
            low = middle
        else:
            high = middle
    level = float(np.exp(low))
    p, t, rate, total, reference, warmth = born(level)
    peak = int(np.argmax(rate))
    quantiles = (np.arange(CLASSES) + 0.5) / CLASSES
    births = np.interp(quantiles * total[-1], total, fine)
    truth = {
        "N_per_cm3": number * 1e-6, "T_growth": warmth, "p_growth_kPa": reference * 1e-3,
        "S_growth": fraction * reference / float(np.exp(props.log_pressure(warmth))),
        "T_nuc": float(t[peak]), "p_nuc_kPa": float(p[peak]) * 1e-3,
        "S_nuc": fraction * float(p[peak]) / float(np.exp(props.log_pressure(t[peak]))),
        "effective_ms": float(np.sum(rate) * 2e-6 / rate[peak]) * 1e3,
        "birth_ms": float(np.interp(0.5 * total[-1], total, fine)) * 1e3,
    }
    back = (p[peak] / t[peak]) / (reference / warmth)
    truth["J_per_cm3_s"] = number * 1e-6 * back / (truth["effective_ms"] * 1e-3)
    per_mole = number * R * warmth / reference
    levels = (before, level, after)
    radius, gas_t, condensed = _stepped(
        props, time, (births, levels, hold), (fraction, start_temperature, per_mole), nature)
    pressure = pressure_at(time, levels, hold, nature.creep)
    density = per_mole * pressure / (R * gas_t * (1.0 - condensed))
    middle = 0.5 * (radius[CLASSES // 2 - 1] + radius[CLASSES // 2])
    middle = np.where(radius[CLASSES // 2] > 0, middle, 0.0)
    return Cloud(time, radius, middle, density, births, truth), pressure


def _stepped(props, time, timing, gas, nature):
    births, levels, hold = timing
    fraction, start_temperature, per_mole = gas
    weight = per_mole / CLASSES
    at_birth = pressure_at(births, levels, hold, nature.creep)
    cold = temperature_path(
        props, np.append(levels[0], at_birth), start_temperature)[1:]
    excess = np.log(fraction * at_birth) - props.log_pressure(cold)
    volume = props.molar_mass / props.density(cold)
    critical = 2.0 * props.tension(cold) * volume / (R * cold * excess)
    state_r = np.maximum(FIRST_RADIUS, 1.6 * critical)
    radius = np.zeros((CLASSES, time.size))
    warm, cond = np.empty(time.size), np.zeros(time.size)
    before = time <= births[0]
    warm[before] = temperature_path(
        props, pressure_at(time[before], levels, hold, nature.creep), start_temperature)
    first = np.array([levels[0], float(pressure_at(births[0], levels, hold, nature.creep))])
    temperature = float(temperature_path(props, first, start_temperature)[1])
    q = 0.0
    memory = {"td": np.full(CLASSES, temperature + 1.0)}

    def rates(at, y, alive):
        r = np.maximum(y[:alive], 1e-9)
        t, q_now = np.clip(y[alive], 190.0, 340.0), min(y[alive + 1], fraction)
        p = float(pressure_at(at, levels, hold, nature.creep))
        step = 1e-7
        dlnp = (np.log(float(pressure_at(at + step, levels, hold, nature.creep)))
                - np.log(float(pressure_at(at - step, levels, hold, nature.creep)))) / (2 * step)
        y_gas = np.clip((fraction - q_now) / (1.0 - q_now), 1e-9, 0.9)
        flux, td, volume = droplet_flux(props, r, memory["td"][:alive], (t, p, y_gas), nature)
        memory["td"][:alive] = td
        factor = nature.scale * (np.maximum(r, 5e-8) / 1e-6) ** nature.bend
        flux = flux * factor
        grow_rate = flux * volume / (4.0 * np.pi * r**2)
        dq = weight * float(np.sum(flux))
        dt = (R * t * dlnp + float(props.latent(t)) * dq) / float(props.heat_capacity(t))
        return np.concatenate([grow_rate, [dt, dq]])

    edges = np.append(births, time[-1])
    for alive in range(1, CLASSES + 1):
        begin, end = edges[alive - 1], edges[alive]
        if end <= begin:
            continue
        inside = (time > begin) & (time <= end)
        y = np.concatenate([state_r[:alive], [temperature, q]])
        sol = solve_ivp(rates, (begin, end), y, method="RK45", args=(alive,), rtol=3e-6,
                        atol=np.concatenate([np.full(alive, 1e-12), [1e-5, 1e-9]]),
                        dense_output=inside.any(),
                        max_step=1e-3 if alive == CLASSES else np.inf)
        if inside.any():
            values = sol.sol(time[inside])
            radius[:alive, inside] = values[:alive]
            warm[inside], cond[inside] = values[alive], values[alive + 1]
        state_r[:alive] = sol.y[:alive, -1]
        temperature, q = float(sol.y[alive, -1]), float(sol.y[alive + 1, -1])
    return radius, warm, cond


def cone_weights(angle, half_angle, polarization, nodes):
    """Return weights of |S1|^2 and |S2|^2 at angles, by brute force over directions of the cone."""
    x, w = np.polynomial.legendre.leggauss(40)
    c0 = np.cos(half_angle)
    cosines = 0.5 * (1 - c0) * x + 0.5 * (1 + c0)
    w = 0.5 * (1 - c0) * w
    turn = (np.arange(256) + 0.5) * 2 * np.pi / 256
    axis = np.array([np.sin(angle), 0.0, np.cos(angle)])
    side = np.array([np.cos(angle), 0.0, -np.sin(angle)])
    up = np.array([0.0, 1.0, 0.0])
    s = np.sqrt(1 - cosines**2)
    direction = (cosines[:, None, None] * axis + s[:, None, None] * (
        np.cos(turn)[None, :, None] * side + np.sin(turn)[None, :, None] * up))
    weight = (w[:, None] * np.full(turn.size, 2 * np.pi / turn.size)).ravel()
    d = direction.reshape(-1, 3)
    theta = np.arccos(np.clip(d[:, 2], -1, 1))
    azimuth = np.arctan2(d[:, 1], d[:, 0])
    if polarization is None:
        across = along = 0.5 * np.ones_like(theta)
    else:
        across = np.sin(azimuth - polarization) ** 2
        along = np.cos(azimuth - polarization) ** 2
    low, high = theta.min(), theta.max()
    turns = np.pi * (np.arange(nodes) + 0.5) / nodes
    points = 0.5 * (low + high) - 0.5 * (high - low) * np.cos(turns)
    bary = np.sin(turns) * (-1.0) ** np.arange(nodes)
    gap = theta[:, None] - points[None, :]
    gap[gap == 0] = 1e-15
    basis = bary / gap
    basis /= basis.sum(axis=1, keepdims=True)
    return points, (weight * across) @ basis, (weight * along) @ basis


def light_tables(optics, relative_index, gas_index, largest):
    """Return exact cross sections on a fine even grid of radius: detectors, extinction, loss."""
    wavelength, polarization, cones, receiver = optics
    k = 2 * np.pi * gas_index / wavelength
    x = np.arange(0.02, k * largest, SIZE_STEP)
    rows = []
    area = np.pi * (x / k) ** 2
    for angle, half in cones:
        points, across, along = cone_weights(angle, half, polarization, 48)
        seen = np.empty_like(x)
        for part in np.array_split(np.arange(x.size), 12):
            light = scatter(x[part], relative_index, points)
            seen[part] = (across @ light.perpendicular + along @ light.parallel) / k**2
        rows.append(seen)
    points, across, along = cone_weights(0.0, max(receiver, 1e-6), None, 24)
    lost = np.empty_like(x)
    plain = np.empty_like(x)
    for part in np.array_split(np.arange(x.size), 12):
        light = scatter(x[part], relative_index, points)
        plain[part] = light.extinction_efficiency * area[part]
        lost[part] = plain[part]
        if receiver:
            lost[part] -= (across @ light.perpendicular + along @ light.parallel) / k**2
    return x / k, np.array([*rows, plain, lost])


def averaged(radii, rows, spread):
    """Return the rows averaged over a Gaussian spread of ln r, on an even grid of ln r."""
    grid = np.linspace(np.log(radii[20]), np.log(radii[-1] * (1 - 4 * spread) - 1e-12), 9000)
    total = np.concatenate(
        [np.zeros((rows.shape[0], 1)),
         np.cumsum(0.5 * (rows[:, 1:] + rows[:, :-1]) * np.diff(radii), axis=1)], axis=1)
    edges = np.linspace(-4.0, 4.0, 65)
    centre = 0.5 * (edges[1:] + edges[:-1])
    weight = np.exp(-0.5 * centre**2)
    weight /= weight.sum()
    mean = np.zeros((rows.shape[0], grid.size))
    for low, high, w in zip(edges[:-1], edges[1:], weight, strict=True):
        a, b = np.exp(grid + low * spread), np.exp(grid + high * spread)
        a, b = np.minimum(a, radii[-1] * 0.9999), np.minimum(b, radii[-1])
        for i, row in enumerate(total):
            mean[i] += w * (np.interp(b, radii, row) - np.interp(a, radii, row)) / (b - a)
    return grid, mean


def channel_shapes(cloud, tables, spread, paths, step, constants):
    """Return each detector's n C exp(-depth) [1/m] and the transmission, filtered."""
    radii, rows = tables
    grid, mean = averaged(radii, rows, spread)
    seen = np.zeros((mean.shape[0], cloud.time.size))
    squares, place = cloud.radius**2, (np.arange(CLASSES) + 0.5) / CLASSES
    for quantile in (np.arange(SUBCLASSES) + 0.5) / SUBCLASSES:
        # r^2 is smooth in the order of birth: straight lines between classes, on to the ends.
        k = int(np.clip(np.searchsorted(place, quantile) - 1, 0, CLASSES - 2))
        t = (quantile - place[k]) * CLASSES
        square = np.maximum(squares[k] + t * (squares[k + 1] - squares[k]), 0.0)
        live = square > 1e-16
        log_r = 0.5 * np.log(np.maximum(square, radii[20] ** 2))
        for i, row in enumerate(mean):
            seen[i] += np.where(live, np.interp(log_r, grid, row), 0.0) / SUBCLASSES
    chamber_path, beam_path = paths
    light = np.exp(-cloud.density * seen[-2] * chamber_path)
    shapes = [cloud.density * one * light for one in seen[:-2]]
    beam = np.exp(-cloud.density * seen[-1] * beam_path)
    return [_filtered(s, step, c) for s, c in zip(shapes, constants, strict=True)], beam, (
        float(cloud.density[-1] * seen[-1][-1] * beam_path))


def _filtered(signal, step, constant):
    if not constant:
        return signal
    h = step / constant
    keep = np.exp(-h)
    share = (1 - keep) / h
    out = lfilter([1 - share, share - keep], [1, -keep], signal - signal[0])
    return out + signal[0]
