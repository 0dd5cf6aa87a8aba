"""A cloud's parameters, its growth, and how growth answers to them."""

from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.cloud import CloudGrowth, CloudParameters, solve_cloud
from scatterfit.droplet_growth.setup import with_threshold

# Steps of the one-sided derivatives of growth: small beside how far first order is followed, far
# above what solving to a millionth leaves.
STEPS = {
    "number": 0.005, "scale": 0.003, "accommodation": 0.01, "temperature": 2e-4,
    "vapour": 1e-3, "threshold": 1e-3, "bend": 2e-3,
    "creep": 2e-3, "stretch": 0.01,
}

_FARTHEST = 0.3


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
    stretch: float = 0.0
    """ln of the duration of births over the setup's; they end when the setup says."""
    depletion: float = 0.0
    """ln of the droplets that share the vapour over those that shine: error in the depletion."""
    angles: tuple[float, ...] = ()
    """Shift of each detector's angle [rad]."""
    tilts: tuple[float, ...] = ()
    """Slow drift of each channel's baseline, over its range of light: odd in time [-]."""
    bows: tuple[float, ...] = ()
    """The same, even in time [-]."""


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
    """Derivatives of ln r at the nodes by parameter, shape (c, m)."""
    log_density_by: dict
    """Derivatives of ln of the number density at the nodes, shape (m,)."""

    def resolved_from(self, spread):
        """Return from when on [s] the classes' ln r is spread by births by less than a limit [-].

        Droplets born early grew in the supersaturation of the hold: their radii differ by more
        than their ages say, so the spread is that of the solved classes.
        """
        growth = self.growth
        wide = (self._spread > spread) | (growth.time < growth.birth_times[0].max())
        return growth.time[np.flatnonzero(wide)[-1]] if wide.any() else -np.inf

    @cached_property
    def _spread(self):
        """Return the standard deviation of ln r over the classes, shape (m,) [-]."""
        log_radius, weights = np.log(self.growth.radius[0]), self.growth.weights
        mean = weights @ log_radius
        return np.sqrt(np.maximum(weights @ (log_radius - mean) ** 2, 0.0))

    @cached_property
    def stacked(self):
        """Return the solution's arrays as compiled loops read them.

        Nodes, shape (m,) [s]; (r + l)^2 and its rate, shape (c, m); derivatives of ln r, shape
        (p, c, m); droplets that shine per volume, shape (m,) [1/m^3]; derivatives of its ln,
        shape (p, m).
        """
        growth = self.growth
        shape = growth.square[0].shape
        by, thinner = [*self.log_radius_by.values()], [*self.log_density_by.values()]
        return (
            np.array(growth.time), np.array(growth.square[0]), np.array(growth.square_rate[0]),
            np.array(by).reshape(-1, *shape),
            growth.number_density[0] * np.exp(-self.cloud.depletion),
            np.array(thinner).reshape(-1, shape[1]),
        )


def no_shifts(model):
    """Return zeros for all that is counted by detector or channel.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.

    Returns
    -------
    fields : dict of str to tuple of float
        ``angles``, ``tilts`` and ``bows`` of a :class:`Cloud` [rad, -, -].
    """
    channels = (0.0,) * len(model.channels)
    detectors = (0.0,) * len(model.setup.apparatus.detectors)
    return {"angles": detectors, "tilts": channels, "bows": channels}


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
    volume = GAS_CONSTANT * path.reference_temperature / path.reference_pressure
    return np.exp(log_number) * volume


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


def grow(setup, cloud, names=(), start=None):
    """Return the solved cloud and, as further variants, its neighbours for derivatives.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    cloud : Cloud
        Where to solve.
    names : sequence of str
        Parameters to vary, in order.
    start : LinearGrowth, optional
        A solution nearby to start from.

    Returns
    -------
    growth : CloudGrowth
        Variant 0 is the cloud itself.
    """
    return solve_cloud(
        setup.properties, setup.path, (_birth_times(setup, cloud, names), setup.births.weights),
        _parameters(setup, cloud, names), setup.start_radius,
        start=None if start is None else _moved(start, cloud, names), tolerance=setup.tolerance,
    )


def _moved(start, cloud, names):
    """Return a solution with its radii moved to first order to a cloud and its neighbours."""
    growth, move = start.growth, 0.0
    for name, by in start.log_radius_by.items():
        move = move + (setting(cloud, name) - setting(start.cloud, name)) * by
    moves = [move + (STEPS[name] * start.log_radius_by[name] if name in start.log_radius_by
                     else 0.0) for name in names]
    before, shape = growth.radius, (len(names) + 1, *growth.square.shape[1:])
    moves = np.array([np.broadcast_to(row, shape[1:]) for row in (move, *moves)])
    radius = before * np.exp(np.clip(moves, -_FARTHEST, _FARTHEST))
    grown = [np.einsum("c,vcm->vm", growth.weights, r**3) for r in (radius, before)]
    more = cloud.number + cloud.depletion - start.cloud.number - start.cloud.depletion
    more = np.array([more, *(more + STEPS[name] * (name == "number") for name in names)])
    return replace(growth, square=(radius + growth.length[0]) ** 2,
                   length=np.full(shape[0], growth.length[0]),
                   condensed=growth.condensed * (grown[0] / grown[1]) * np.exp(more)[:, None])


def linear_growth(setup, cloud, names=(), start=None):
    """Return a cloud's growth and its derivatives.

    The cloud and its neighbours are solved together: at these sizes a round for all of them costs
    little more than a round for one.

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
    both = grow(setup, cloud, moving, start)
    growth = both.variant(0)
    born = both.time > growth.birth_times[0][:, None]
    log_radius, density = np.log(both.radius), np.log(both.number_density)
    radius_by, density_by = {}, {}
    for i, name in enumerate(moving):
        change = (log_radius[i + 1] - log_radius[0]) / STEPS[name]
        radius_by[name] = np.where(born, change, 0.0)
        density_by[name] = (density[i + 1] - density[0]) / STEPS[name]
    return LinearGrowth(cloud, growth, radius_by, density_by)


def with_changes(linear, changes):
    """Return a solution that also knows what errors of the bench do to growth.

    Parameters
    ----------
    linear : LinearGrowth
        The solution.
    changes : dict
        Name to the changes of ln r at the nodes, shape (c, m), and of ln of the number density,
        shape (m,), per unit of the error.

    Returns
    -------
    linear : LinearGrowth
        With more derivatives.
    """
    if not changes:
        return linear
    return replace(
        linear,
        log_radius_by=linear.log_radius_by | {name: one[0] for name, one in changes.items()},
        log_density_by=linear.log_density_by | {name: one[1] for name, one in changes.items()},
    )


def setting(cloud, name):
    """Return a growth parameter of a cloud; an error of the bench is none, and zero.

    Parameters
    ----------
    cloud : Cloud
        A cloud.
    name : str
        Parameter, or key path of the chamber file.

    Returns
    -------
    value : float
        Its value [any].
    """
    return getattr(cloud, name, 0.0)


def _birth_times(setup, cloud, names):
    """Return the births of each variant, shape (v, c) or (c,) [s]."""
    if setup.threshold is None:
        stretch = np.full(len(names) + 1, cloud.stretch)
        if "stretch" in names:
            stretch[1 + list(names).index("stretch")] += STEPS["stretch"]
        elif not cloud.stretch:
            return setup.births.times
        end = setup.births.last
        return end + np.exp(stretch)[:, None] * (setup.births.times - end)
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
