"""What each channel would show: a cloud's growth, its light, and the derivatives of both."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.cloud import CloudGrowth, CloudParameters, solve_cloud
from scatterfit.droplet_growth.setup import GrowthSetup, with_threshold
from scatterfit.forward.light import CloudLight, look_up, spread_table
from scatterfit.forward.low_pass import low_pass

# Steps of the numerical derivatives of growth; growth is smooth to far below them.
STEPS = {
    "number": 0.02, "scale": 0.01, "accommodation": 0.05, "temperature": 3e-4,
    "vapour": 2e-3, "threshold": 2e-3, "bend": 5e-3,
    "creep": 5e-3,
}


@dataclass(frozen=True)
class Channel:
    """One optical channel as the model needs it."""

    column: str
    kind: str
    """``"scatter"`` or ``"transmission"``."""
    row: int
    """Row of its cross section in the light; for a transmission that of the extinction."""
    path: float
    """Cloud that attenuates it [m]."""
    gain: float | None
    """[V m]; ``None`` where the amplitude is free."""
    time_constant: float
    """[s]."""
    angle_row: int | None = None
    """Row with the derivative of its cross section by the angle [m^2/rad]."""


@dataclass(frozen=True)
class Cloud:
    """What the fit looks for, as logarithms where a quantity is positive."""

    number: float
    """ln of droplets per volume at the reference state [1/m^3]."""
    scale: float = 0.0
    """ln of the growth scale."""
    delay: float = 0.0
    """Optical time less pressure time, or time of the median birth without a gauge [s]."""
    variance: float = 0.0
    """Variance of ln r beyond that of the base table [-]."""
    accommodation: float = 0.0
    """ln of the mass accommodation coefficient over the chamber file's."""
    temperature: float = 0.0
    """ln of the start temperature over the chamber file's."""
    vapour: float = 0.0
    """ln of the vapour fraction over the chamber file's."""
    threshold: float = 0.0
    """ln of the seeds' threshold over the setup's."""
    bend: float = 0.0
    """Exponent of a further factor (r / 1 um)^bend on the growth rate [-]."""
    creep: float = 0.0
    """ln of a further factor on the growth rate at the end, growing evenly with time [-]."""
    depletion: float = 0.0
    """ln of the droplets that share the vapour over those that shine: error in the depletion."""
    angles: tuple[float, ...] = ()
    """Shift of each detector's angle [rad]."""


@dataclass(frozen=True)
class PulseModel:
    """One pulse's forward model."""

    setup: GrowthSetup
    light: CloudLight
    channels: tuple[Channel, ...]
    extinction_row: int


@dataclass(frozen=True)
class LinearGrowth:
    """A solved cloud and how it answers to small changes of its parameters.

    Growth is smooth in its parameters while the light is not: the cloud is solved a few times in
    a fit, and followed to first order in between.
    """

    cloud: Cloud
    """Where it was solved."""
    growth: CloudGrowth
    """The solution, one variant."""
    log_radius_by: dict
    """Derivatives of ln r at the nodes by parameter, for a few classes, shape (f, m)."""
    carry: np.ndarray | None
    """From those classes to all, shape (c, f)."""
    log_density_by: dict
    """Derivatives of ln of the number density at the nodes, shape (m,)."""


@dataclass(frozen=True)
class CloudState:
    """The cloud at the sample times."""

    radius: np.ndarray
    """Shape (c, n) [m]; zero before birth."""
    number_density: np.ndarray
    """Shape (n,) [1/m^3]."""
    log_radius_by: dict
    """Derivatives of ln r by each parameter, shape (c, n)."""
    log_density_by: dict
    """Derivatives of ln of the number density, shape (n,)."""
    linear: LinearGrowth
    """The solved cloud behind it."""
    table: object = None
    """The cross sections it was seen with (SpreadTable)."""

    @property
    def growth(self):
        """Return the solved cloud (CloudGrowth)."""
        return self.linear.growth


def per_mole(setup, log_number):
    """Return droplets per mole of gas from ln of their number at the reference state [1/m^3].

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    log_number : array_like, shape (...)
        ln of droplets per volume [-].

    Returns
    -------
    droplets : ndarray, shape (...)
        Droplets per mole [1/mol].
    """
    path = setup.path
    return np.exp(log_number) * (GAS_CONSTANT * path.reference_temperature) / path.reference_pressure


def _parameters(setup, cloud, names):
    """Return the growth parameters of the cloud and of its neighbours by name."""
    vapour = setup.apparatus.vapour
    values = {
        "number": cloud.number, "scale": cloud.scale, "accommodation": cloud.accommodation,
        "temperature": cloud.temperature, "vapour": cloud.vapour, "bend": cloud.bend,
        "creep": cloud.creep,
    }
    rows = {key: np.full(len(names) + 1, value) for key, value in values.items()}
    for i, name in enumerate(names):
        if name in rows:
            rows[name][i + 1] += STEPS[name]
    mass = np.minimum(vapour.mass_accommodation * np.exp(rows["accommodation"]), 5.0)
    return CloudParameters(
        droplets_per_mole=per_mole(setup, rows["number"] + cloud.depletion),
        growth_scale=np.exp(rows["scale"]),
        mass_accommodation=mass,
        thermal_accommodation=np.full(mass.size, vapour.thermal_accommodation),
        vapour_fraction=setup.vapour_fraction * np.exp(
            rows["vapour"] + setup.vapour_by_temperature * rows["temperature"]
        ),
        temperature_factor=np.exp(rows["temperature"]),
        growth_bend=rows["bend"],
        growth_creep=rows["creep"],
    )


def grow(setup, cloud, names=(), classes=None, start=None):
    """Return the solved cloud and, as further variants, its neighbours for derivatives.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    cloud : Cloud
        Where to solve.
    names : sequence of str
        Parameters to vary, in order.
    classes : sequence of int, optional
        Which classes of droplets to follow; all by default.
    start : CloudGrowth, optional
        A solution nearby to start from.

    Returns
    -------
    growth : CloudGrowth
        Variant 0 is the cloud itself.
    """
    births = _birth_times(setup, cloud, names)
    weights = setup.births.weights
    if classes is not None:
        births, weights = births[..., classes], weights[list(classes)]
        weights = weights / weights.sum()
    return solve_cloud(
        setup.properties, setup.path, (births, weights),
        _parameters(setup, cloud, names), setup.start_radius, start,
    )


def linear_growth(setup, cloud, names=(), start=None):
    """Return a cloud's growth and its derivatives.

    Derivatives are smooth in the time of birth: they are worked out for three classes and carried
    over to the others by the parabola through them.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    cloud : Cloud
        Where to solve.
    names : sequence of str
        Parameters; those that do not act on growth are ignored.
    start : LinearGrowth, optional
        A solution nearby to start from.

    Returns
    -------
    linear : LinearGrowth
        Solution and derivatives.
    """
    moving = [name for name in names if name in STEPS]
    growth = grow(setup, cloud, start=start.growth if start is not None else None)
    if not moving:
        return LinearGrowth(cloud, growth, {}, None, {})
    count = setup.births.weights.size
    few = [0] if count == 1 else sorted({count // 6, count // 2, count - 1 - count // 6})
    near = grow(setup, cloud, moving, few, growth)
    carry = _parabola(setup.births.times[few], setup.births.times)
    born = near.time > near.birth_times[0][:, None]
    log_radius = np.log(np.maximum(near.radius, near.start_radius))
    density = np.log(near.number_density)
    radius_by, density_by = {}, {}
    for i, name in enumerate(moving):
        change = (log_radius[i + 1] - log_radius[0]) / STEPS[name]
        radius_by[name] = np.where(born, change, 0.0)
        density_by[name] = (density[i + 1] - density[0]) / STEPS[name]
    return LinearGrowth(cloud, growth, radius_by, carry, density_by)


def _parabola(nodes, points):
    """Return the matrix that carries values at a few nodes to points, shape (points, nodes)."""
    matrix = np.ones((points.size, nodes.size))
    for j in range(nodes.size):
        for k in range(nodes.size):
            if k != j:
                matrix[:, j] *= (points - nodes[k]) / (nodes[j] - nodes[k])
    return matrix


def _birth_times(setup, cloud, names):
    """Return the births of each variant, shape (v, c) or (c,) [s]."""
    if setup.threshold is None:
        return setup.births.times
    clouds = [cloud] * (len(names) + 1)
    for i, name in enumerate(names):
        if name in ("threshold", "vapour", "temperature"):
            clouds[i + 1] = replace(cloud, **{name: getattr(cloud, name) + STEPS[name]})
    known = {}
    for other in clouds:
        if other not in known:
            known[other] = with_threshold(setup, setup.threshold * np.exp(other.threshold),
                                          _wetter(setup, other)).births.times
    return np.array([known[other] for other in clouds])


def _wetter(setup, cloud):
    """Return by how much ln S lies above that of the setup, near the growth temperature."""
    path = setup.path
    steepness = float(setup.substance.latent_heat(path.reference_temperature)) / (
        GAS_CONSTANT * path.reference_temperature
    )
    return cloud.vapour + (setup.vapour_by_temperature - steepness) * cloud.temperature


def cloud_state(linear, cloud, time, names=()):
    """Return radius and number density at the sample times, with their derivatives.

    Parameters
    ----------
    linear : LinearGrowth
        A solution at or near the cloud.
    cloud : Cloud
        Where to evaluate.
    time : ndarray, shape (n,)
        Samples [s].
    names : sequence of str
        Parameters to differentiate by.

    Returns
    -------
    state : CloudState
        Per class and sample.
    """
    growth = linear.growth
    clock = time - cloud.delay
    index, t, width = _places(growth.time, clock)
    square = hermite(growth.square[0], growth.square_rate[0], index, t, width)
    born = clock > growth.birth_times[0][:, None]
    length = growth.length[0]
    # Cubics may undershoot where a cloud starts to grow.
    square = np.maximum(square, (growth.start_radius + length) ** 2)
    safe = np.sqrt(square) - length
    density = _straight(growth.number_density[0] * np.exp(-linear.cloud.depletion), index, t)
    radius_by = {
        name: linear.carry @ _straight(rows, index, t)
        for name, rows in linear.log_radius_by.items()
    }
    density_by = {
        name: _straight(row, index, t) for name, row in linear.log_density_by.items()
    }
    log_move, thinner = _moves(linear, cloud, radius_by, density_by)
    if log_move is not None:
        safe = safe * np.exp(log_move)
        density = density * np.exp(thinner)
    if "delay" in names:
        slope = _straight(growth.square_rate[0], index, t)
        radius_by["delay"] = np.where(born, -slope / (2.0 * (safe + length) * safe), 0.0)
    return CloudState(np.where(born, safe, 0.0), density, radius_by, density_by, linear)


def _moves(linear, cloud, radius_by, density_by):
    """Return the first-order change of ln r and ln n from where growth was solved."""
    log_move, thinner = None, 0.0
    for name in linear.log_radius_by:
        step = getattr(cloud, name) - getattr(linear.cloud, name)
        if name == "number":
            light = step
            step = step + cloud.depletion - linear.cloud.depletion
            thinner = thinner + light - step
        if step or (name == "number" and light):
            log_move = (0.0 if log_move is None else log_move) + step * radius_by[name]
            thinner = thinner + step * density_by[name]
    return log_move, thinner


def _straight(values, index, t):
    """Return values between nodes by straight lines, shape (..., n)."""
    low = values[..., index]
    return low + t * (values[..., index + 1] - low)


def _places(nodes, clock):
    """Return the cell of each sample, its place in the cell and the cell's width."""
    index = np.clip(np.searchsorted(nodes, clock, side="right") - 1, 0, nodes.size - 2)
    width = nodes[index + 1] - nodes[index]
    t = np.clip((clock - nodes[index]) / width, 0.0, 1.0)
    return index, t, width


def hermite(values, rates, index, t, width):
    """Return cubic interpolants of values with known time derivatives.

    Parameters
    ----------
    values, rates : ndarray, shape (..., m)
        At the nodes [any], [any/s].
    index : ndarray, shape (n,)
        Cell of each point.
    t : ndarray, shape (n,)
        Place in the cell, 0 to 1 [-].
    width : ndarray, shape (n,)
        Of the cell [s].

    Returns
    -------
    interpolated : ndarray, shape (..., n)
        Values at the points [any].
    """
    low, high = values[..., index], values[..., index + 1]
    first, last = rates[..., index] * width, rates[..., index + 1] * width
    rise = high - low
    c = first + last - 2.0 * rise
    b = rise - first - c
    return low + t * (first + t * (b + t * c))


@dataclass(frozen=True)
class ChannelSignal:
    """One channel's noiseless shape and its derivatives."""

    shape: np.ndarray
    """Volts per unit amplitude, or transmission, shape (n,)."""
    by: dict
    """Derivatives by parameter, each of shape (n,); the number's is split by what it acts
    through: ``"number_gain"``, ``"number_extinction"``, ``"number_depletion"``."""


def channel_signals(model, cloud, time, names=(), linear=None, near=None):
    """Return what every channel would show without noise and offset.

    A detector shows ``gain n C exp(-n C_ext path)`` with its cross section averaged over the
    cloud (``gain`` is 1 where none is known); the transmission shows ``exp(-n C_ext path)``.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.
    cloud : Cloud
        Where to evaluate.
    time : ndarray, shape (n,)
        Samples [s].
    names : sequence of str
        Parameters to differentiate by.
    linear : LinearGrowth, optional
        Growth solved nearby, with derivatives by all the names that move it; solved at the cloud
        where it is missing.
    near : SpreadTable, optional
        A table of nearly the right spread.

    Returns
    -------
    signals : list of ChannelSignal
        One a channel.
    state : CloudState
        The cloud behind them.
    """
    if linear is None:
        linear = linear_growth(model.setup, cloud, names)
    state = cloud_state(linear, cloud, time, names)
    table = spread_table(model.light, cloud.variance, near)
    born = state.radius > 0.0
    log_radius = np.log(np.where(born, state.radius, np.exp(table.start)))
    values, slopes, bends = look_up(table, log_radius, cloud.variance)
    weights = np.where(born, state.growth.weights[:, None], 0.0)
    mean = np.einsum("cn,rcn->rn", weights, values)
    for detector, channel in enumerate(model.channels):
        if channel.angle_row is not None and cloud.angles:
            mean[channel.row] += cloud.angles[detector] * mean[channel.angle_row]
            values[channel.row] += cloud.angles[detector] * values[channel.angle_row]
            slopes[channel.row] += cloud.angles[detector] * slopes[channel.angle_row]
    mean_by = {
        name: np.einsum("cn,rcn->rn", weights * state.log_radius_by[name], slopes)
        for name in names if name in state.log_radius_by
    }
    if "variance" in names:
        mean_by["variance"] = np.einsum("cn,rcn->rn", weights, bends)
    signals = [
        _one_channel(model, i, channel, state, mean, mean_by, time, names)
        for i, channel in enumerate(model.channels)
    ]
    return signals, replace(state, table=table)


def _one_channel(model, position, channel, state, mean, mean_by, time, names):
    """Return one channel's signal."""
    density = state.number_density
    scatter = channel.kind == "scatter"
    row = model.extinction_row if scatter else channel.row
    depth = density * mean[row] * channel.path
    light = np.exp(-depth)
    own = mean[channel.row]
    shape = (channel.gain or 1.0) * density * own * light if scatter else light
    bright = (channel.gain or 1.0) * density * light
    rows, order = [shape], []
    for name in names:
        change = mean_by.get(name)
        thinner = state.log_density_by.get(name)
        part = np.zeros_like(shape)
        if change is not None:
            if scatter:
                part = part + bright * change[channel.row]
            part = part - shape * density * channel.path * change[row]
        if thinner is not None:
            if name == "number":
                thinner = thinner - 1.0
            part = part + shape * thinner * ((1.0 if scatter else 0.0) - depth)
        if name == f"angle:{position}" and channel.angle_row is not None:
            part = part + bright * mean[channel.angle_row]
        if name == "number":
            order += ["number_depletion", "number_gain", "number_extinction"]
            rows += [part, shape if scatter else np.zeros_like(shape), -shape * depth]
        else:
            order.append(name)
            rows.append(part)
    filtered = low_pass(time, np.array(rows), channel.time_constant)
    by = dict(zip(order, filtered[1:], strict=True))
    if "number" in names:
        by["number"] = by["number_depletion"] + by["number_gain"] + by["number_extinction"]
        by["depletion"] = by["number_depletion"]
    return ChannelSignal(filtered[0], by)
