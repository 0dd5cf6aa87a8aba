"""Growth of one droplet and of a cloud against independent solutions, limits and tables."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from scatterfit import matter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.births import births_at_once, births_from_rate
from scatterfit.droplet_growth.classical_rate import classical_log_rate
from scatterfit.droplet_growth.cloud import CloudParameters, solve_cloud
from scatterfit.droplet_growth.gas_path import GasPath, adiabatic_temperature, choose_nodes
from scatterfit.droplet_growth.hold import settle_hold
from scatterfit.droplet_growth.pressure import smooth, undo_lag
from scatterfit.droplet_growth.properties import growth_properties, mean_speed
from scatterfit.droplet_growth.setup import births_at_threshold, growth_setup
from scatterfit.droplet_growth.single_droplet import growth_rate
from scatterfit.droplet_growth.transition import (
    heat_mean_free_path,
    transition_factor,
    vapour_mean_free_path,
)

R = GAS_CONSTANT


# The published equations again, written out one by one from the correlations.


class Reference:
    """One vapour in one gas, with the laws of growth written from their papers."""

    def __init__(self, substance, gas, fraction, droplet_temperature, span=(220.0, 320.0)):
        grid = np.linspace(*span, 400)
        self.liquid_volume = substance.molar_mass / float(substance.density(droplet_temperature))
        self.vapour_mass, self.mass = substance.molar_mass, (
            (1.0 - fraction) * gas.molar_mass + fraction * substance.molar_mass)
        diffusivity = matter.diffusivity(substance, gas)

        def tabled(values):
            return CubicSpline(grid, values)

        self.log_pressure = tabled(np.log(substance.saturation_pressure(grid)))
        self.diffusivity = tabled(diffusivity(grid))
        self.conductivity = tabled(matter.moist_conductivity(gas, substance, fraction, grid))
        self.latent = tabled(substance.latent_heat(grid))
        self.tension = tabled(substance.surface_tension(grid))

    def fluxes(self, radius, own, gas, accommodation, heat_capacity):
        """Return moles a second and heat a second that leave a droplet [mol/s], [W]."""
        temperature, pressure, share = gas
        film = 0.5 * (own + temperature)
        diffusivity = self.diffusivity(film) * 101325.0 / pressure
        speed = np.sqrt(8 * R * film / (np.pi * self.vapour_mass))
        gas_speed = np.sqrt(8 * R * film / (np.pi * self.mass))
        knudsen = 3 * diffusivity / speed / radius
        carried = pressure / (R * temperature) * gas_speed * (heat_capacity - R / 2)
        heat_knudsen = 3 * self.conductivity(film) / carried / radius
        kelvin = np.exp(2 * self.tension(own) * self.liquid_volume / (R * own * radius))
        surface = np.exp(self.log_pressure(own)) / pressure * kelvin
        stefan = np.log((1 - surface) / (1 - share))
        moles = -4 * np.pi * radius * pressure * diffusivity / (R * film) * stefan
        heat = 4 * np.pi * radius * self.conductivity(film) * (own - temperature)
        return (moles * fuchs_sutugin(knudsen, accommodation[0]),
                heat * fuchs_sutugin(heat_knudsen, accommodation[1]))

    def rate(self, radius, gas, accommodation, heat_capacity):
        """Return dr/dt [m/s] by bisection and secants for the droplet's temperature, shape (c,)."""
        radius = np.asarray(radius, dtype=float)

        def lacking(own):
            moles, heat = self.fluxes(radius, own, gas, accommodation, heat_capacity)
            return heat + self.latent(own) * moles

        # Secant steps with a bracket that always holds the root.
        low, high = np.full(radius.shape, gas[0] - 40.0), np.full(radius.shape, gas[0] + 40.0)
        below, above = lacking(low), lacking(high)
        for turn in range(60):
            own = (0.5 * (low + high) if turn % 3 == 2
                   else (low * above - high * below) / (above - below))
            here = lacking(own)
            low, below = np.where(here < 0, own, low), np.where(here < 0, here, below)
            high, above = np.where(here < 0, high, own), np.where(here < 0, above, here)
            if np.all(np.abs(here) < 1e-10 * np.abs(self.latent(own) * radius)):
                break
        moles, _ = self.fluxes(radius, own, gas, accommodation, heat_capacity)
        return -moles * self.liquid_volume / (4 * np.pi * radius**2), own

    def cloud(self, births, times, gas, parameters, heat_capacity):
        """Return radii at times, shape (c, n) [m], gas temperature [K] and moles condensed [-].

        An ordinary differential equation of r^2 of each class, moles condensed q and gas
        temperature T, cp dT = R T dp/p + L dq, restarted at each birth.
        """
        pressure_of, start_temperature, fraction = gas
        number, accommodation, start_radius = parameters
        born, weights = births
        end = times[-1]
        state = np.concatenate([np.full(born.size, start_radius**2), [0.0, start_temperature]])

        def change(time, state):
            radius = np.sqrt(np.maximum(state[:-2], (0.5 * start_radius) ** 2))
            condensed, temperature = state[-2:]
            pressure = float(pressure_of(time))
            share = (fraction - condensed) / (1 - condensed)
            alive = born <= begin + 1e-15
            speed, _ = self.rate(radius, (temperature, pressure, share), accommodation,
                                 heat_capacity)
            speed = np.where(alive, speed, 0.0)
            moles = number * 4 * np.pi / self.liquid_volume * np.sum(weights * radius**2 * speed)
            warming = (R * temperature * float(pressure_of(time, 1)) / pressure
                       + float(self.latent(temperature)) * moles) / heat_capacity
            return np.concatenate([2 * radius * speed, [moles, warming]])

        radii = np.full((born.size, times.size), start_radius)
        temperatures, condensates = np.empty(times.size), np.empty(times.size)
        stops = np.unique([gas_start(pressure_of), *born, end])
        for begin, stop in pairwise(stops):
            found = solve_ivp(
                change, (begin, stop), state, method="LSODA", rtol=1e-7, dense_output=True,
                atol=np.array([1e-20] * born.size + [1e-13, 1e-9]),
            )
            state = found.y[:, -1]
            inside = (times >= begin) & (times <= stop)
            if not inside.any():
                continue
            values = found.sol(times[inside])
            radii[:, inside] = np.sqrt(np.maximum(values[:-2], 0.0))
            condensates[inside], temperatures[inside] = values[-2], values[-1]
        return radii, temperatures, condensates


def fuchs_sutugin(knudsen, accommodation):
    """Return the correction of Fuchs and Sutugin 1971 as Seinfeld and Pandis 2006 print it.

    Their equation 12.43 has 0.283 where the expanded form has 4/3 times 0.283 = 0.377.
    """
    top = 0.75 * accommodation * (1 + knudsen)
    return top / (knudsen**2 + knudsen + 0.75 * 0.377 * knudsen * accommodation
                  + 0.75 * accommodation)


def gas_start(pressure_of):
    """Return the first moment of a pressure spline [s]."""
    return float(pressure_of.x[0])


WATER, ARGON, AIR = matter.substance("water"), matter.carrier("argon"), matter.carrier("air")
T_GROWTH, P_GROWTH = 270.0, 70e3


def properties_of(substance=WATER, gas=ARGON, fraction=0.012, low=225.0, high=312.0, own=275.0):
    """Return the polynomials of one vapour in one gas."""
    return growth_properties(substance, gas, fraction, low, high, own)


def pulse(levels=(52e3, 70e3), hold=1e-3, rise=3e-4, late=0.0, end=0.1):
    """Return a pressure spline from the hold on: low, a rise to the growth stage, a slow end."""
    grid = np.concatenate([np.linspace(0.0, 3e-3, 1201), np.linspace(3e-3, end, 800)[1:]])
    up = np.clip((grid - hold) / rise, 0.0, 1.0)
    rising = levels[0] + (levels[1] - levels[0]) * 0.5 * (1 - np.cos(np.pi * up))
    moving = 1.0 + late * np.clip((grid - 0.02) / 0.06, 0.0, 1.0) ** 2
    return CubicSpline(grid, rising * moving)


def path_of(pressure_of, properties, births, count=150, end_state=(T_GROWTH, P_GROWTH)):
    """Return the solver's gas path along a pressure spline."""
    time = pressure_of.x
    nodes = choose_nodes(time, pressure_of(time), (births.times[0], births.times[-1]), count)
    temperature, pressure = end_state
    at = pressure_of(nodes)
    return GasPath(nodes, at,
                   adiabatic_temperature(at, temperature, pressure, properties.heat_capacity),
                   pressure, temperature)


def parameters_of(number, fraction=0.012, mass=1.0, **more):
    """Return the parameters of one variant; the number is per m^3 at the growth state."""
    per_mole = number * R * T_GROWTH / P_GROWTH
    return CloudParameters(np.array([per_mole]), np.ones(1), np.array([mass]), np.ones(1),
                           np.array([fraction]), np.ones(1), **more)


HELD = births_from_rate(np.linspace(0.0, 1e-3, 101), np.zeros(101), 4)

CLOUDS = {
    "thin": {"number": 4e7},
    "thick": {"number": 4e10},
    "relaxing fast": {"number": 4e12},
    "pressure still moves": {"number": 5e9, "late": 0.03},
    "wet, slow sticking": {"number": 2e9, "fraction": 0.03, "mass": 0.3},
}


@pytest.mark.parametrize("name", CLOUDS)
def test_cloud_against_an_independent_ode_solution(name):
    case = {"fraction": 0.012, "mass": 1.0, "late": 0.0, **CLOUDS[name]}
    pressure_of = pulse(late=case["late"])
    properties = properties_of(fraction=case["fraction"])
    path = path_of(pressure_of, properties, HELD)
    cloud = solve_cloud(properties, path, (HELD.times, HELD.weights),
                        parameters_of(case["number"], case["fraction"], case["mass"]))
    assert cloud.converged
    reference = Reference(WATER, ARGON, case["fraction"], 275.0)
    times = path.time[path.time > HELD.times[-1]]
    start = float(adiabatic_temperature(pressure_of(0.0), T_GROWTH, P_GROWTH,
                                        properties.heat_capacity))
    radii, temperature, condensed = reference.cloud(
        (HELD.times, HELD.weights), times, (pressure_of, start, case["fraction"]),
        (case["number"] * R * T_GROWTH / P_GROWTH, (case["mass"], 1.0), 3e-9),
        properties.heat_capacity,
    )
    after = path.time > HELD.times[-1]
    late = times > HELD.times[-1] + 4e-3
    ratio = cloud.radius[0][:, after][:, late] / radii[:, late] - 1.0
    tight = 3e-4 if name != "relaxing fast" else 3e-3
    assert np.abs(HELD.weights @ ratio)[times[late] > 0.03].max() < tight
    assert np.abs(ratio).max() < 10 * tight
    assert np.abs(ratio[1]).max() < 2 * tight
    assert cloud.temperature[0, after][late] == pytest.approx(temperature[late], abs=0.005)
    assert cloud.condensed[0, after][late] == pytest.approx(condensed[late], rel=2e-3, abs=1e-9)


@pytest.mark.parametrize("name", ["thin", "thick", "pressure still moves"])
def test_more_nodes_change_little(name):
    case = {"fraction": 0.012, "mass": 1.0, "late": 0.0, **CLOUDS[name]}
    pressure_of = pulse(late=case["late"])
    properties = properties_of(fraction=case["fraction"])
    times = np.linspace(0.03, 0.0999, 50)
    squares = []
    for count in (150, 600):
        path = path_of(pressure_of, properties, HELD, count)
        cloud = solve_cloud(properties, path, (HELD.times, HELD.weights),
                            parameters_of(case["number"], case["fraction"]))
        mean = HELD.weights @ cloud.square[0]
        squares.append(CubicSpline(path.time, mean)(times))
    # In (r + l)^2, so the radius changes by about half.
    assert np.abs(squares[0] / squares[1] - 1.0).max() < 2e-4


def test_start_from_a_solution_nearby_ends_at_the_same_cloud():
    pressure_of, properties = pulse(), properties_of()
    path = path_of(pressure_of, properties, HELD)
    births = (HELD.times, HELD.weights)
    near = solve_cloud(properties, path, births, parameters_of(7e9))
    cold = solve_cloud(properties, path, births, parameters_of(1e10))
    warm = solve_cloud(properties, path, births, parameters_of(1e10), start=near)
    assert warm.converged
    assert warm.radius == pytest.approx(cold.radius, rel=5e-6)
    assert warm.temperature == pytest.approx(cold.temperature, rel=1e-6)


def test_variants_are_solved_as_if_alone():
    pressure_of, properties = pulse(), properties_of()
    path, births = path_of(pressure_of, properties, HELD), (HELD.times, HELD.weights)
    one, other = parameters_of(1e9), parameters_of(2e10, mass=0.2)
    both = CloudParameters(*(np.concatenate([a, b]) for a, b in zip(
        one.columns()[:6], other.columns()[:6], strict=True)))
    together = solve_cloud(properties, path, births, both)
    for i, alone in enumerate((one, other)):
        found = solve_cloud(properties, path, births, alone)
        assert together.radius[i] == pytest.approx(found.radius[0], rel=1e-5)


# Conservation.


@settings(max_examples=12, deadline=None)
@given(number=st.floats(7.0, 12.0), fraction=st.floats(0.006, 0.03), mass=st.floats(0.05, 1.0))
def test_vapour_and_energy_are_conserved(number, fraction, mass):
    """Moles in droplets are the moles lost; cp dT = R T dp/p + L dq in its entropy form."""
    pressure_of, properties = pulse(), properties_of(fraction=fraction)
    path = path_of(pressure_of, properties, HELD)
    per_mole = 10**number * R * T_GROWTH / P_GROWTH
    cloud = solve_cloud(properties, path, (HELD.times, HELD.weights),
                        parameters_of(10**number, fraction, mass))
    volume = 4 / 3 * np.pi * (HELD.weights @ (cloud.radius[0] ** 3 - 3e-9**3))
    in_droplets = per_mole * volume / properties.molar_volume
    assert cloud.condensed[0] == pytest.approx(in_droplets, rel=2e-4, abs=2e-5 * fraction)
    share = (fraction - cloud.condensed[0]) / (1 - cloud.condensed[0])
    assert cloud.vapour_fraction[0] == pytest.approx(share, abs=1e-8)
    # ln T = ln T0 + (R/cp) ln(p/p0) + sum of L dq / (cp T), by another quadrature.
    latent = CubicSpline(np.linspace(225, 320, 200), WATER.latent_heat(np.linspace(225, 320, 200)))
    middle = 0.5 * (cloud.temperature[0, 1:] + cloud.temperature[0, :-1])
    heat = np.cumsum(latent(middle) / (properties.heat_capacity * middle)
                     * np.diff(cloud.condensed[0]))
    expected = path.temperature[1:] * np.exp(heat)
    assert cloud.temperature[0, 1:] == pytest.approx(expected, rel=6e-5)


def test_a_thick_cloud_ends_at_saturation():
    """So many droplets that nothing is left to take: the gas is saturated at its own temperature.

    With y - q = p_s(T) / p over droplets of the final size and ln T risen by L q / (cp T).
    """
    pressure_of, properties = pulse(), properties_of()
    path = path_of(pressure_of, properties, HELD)
    cloud = solve_cloud(properties, path, (HELD.times, HELD.weights), parameters_of(1e12))
    temperature, radius = cloud.temperature[0, -1], HELD.weights @ cloud.radius[0, :, -1]

    def excess(condensed):
        own = brentq(lambda t: properties.heat_capacity * np.log(t / T_GROWTH)
                     - float(WATER.latent_heat(0.5 * (t + T_GROWTH))) * condensed
                     / (0.5 * (t + T_GROWTH)), 250, 330)
        kelvin = np.exp(2 * float(WATER.surface_tension(own)) * properties.molar_volume
                        / (R * own * radius))
        share = (0.012 - condensed) / (1 - condensed)
        return share - float(WATER.saturation_pressure(own)) / P_GROWTH * kelvin, own

    condensed = brentq(lambda q: excess(q)[0], 1e-6, 0.0119)
    assert cloud.condensed[0, -1] == pytest.approx(condensed, rel=0.01)
    assert temperature == pytest.approx(excess(condensed)[1], abs=0.05)


def test_number_density_follows_the_gas():
    """Droplets move with the gas: n is droplets per mole of gas times moles per volume.

    Condensed moles leave the gas, so a mole of gas as it was fills (1 - q) R T / p.
    """
    pressure_of, properties = pulse(), properties_of()
    path = path_of(pressure_of, properties, HELD)
    cloud = solve_cloud(properties, path, (HELD.times, HELD.weights), parameters_of(1e9))
    # Undisturbed, at the growth state, the number is the one put in.
    thin = solve_cloud(properties, path, (HELD.times, HELD.weights), parameters_of(1e5))
    assert thin.number_density[0, -1] == pytest.approx(1e5, rel=1e-5)
    volume = (1 - cloud.condensed[0]) * R * cloud.temperature[0] / path.pressure
    assert cloud.number_density[0] * volume == pytest.approx(1e9 * R * T_GROWTH / P_GROWTH)
    assert cloud.number_density[0, -1] < 1e9


def test_droplets_do_not_shrink_below_their_start_where_nothing_is_supersaturated():
    properties = properties_of(fraction=0.004)
    path = path_of(pulse(), properties, HELD)
    cloud = solve_cloud(properties, path, (HELD.times, HELD.weights), parameters_of(1e9, 0.004))
    assert np.all(cloud.radius >= 3e-9 * (1 - 1e-9))
    assert np.all(cloud.condensed >= 0.0)


# One droplet.


def rate_of(properties, radius, gas, accommodation=(1.0, 1.0), guess=None):
    """Return dr/dt [m/s] and the droplet's temperature [K], converged."""
    radius = np.atleast_1d(np.asarray(radius, dtype=float))
    temperature, pressure, fraction = gas
    surroundings = (np.full(radius.shape, float(temperature)), pressure,
                    np.full(radius.shape, float(fraction)))
    start = np.full(radius.shape, guess or temperature + 1.0)
    return growth_rate(properties, radius, surroundings, accommodation, start, steps=12)[:2]


@pytest.mark.parametrize(("substance", "carrier"), [
    ("water", "argon"), ("water", "helium"), ("1-propanol", "argon"), ("n-nonane", "nitrogen"),
])
@pytest.mark.parametrize("supersaturation", [0.5, 0.99, 1.5, 3.0])
def test_rate_against_the_published_laws_solved_by_bracketing(substance, carrier, supersaturation):
    substance, gas = matter.substance(substance), matter.carrier(carrier)
    fraction = supersaturation * float(substance.saturation_pressure(T_GROWTH)) / P_GROWTH
    properties = growth_properties(substance, gas, fraction, 225.0, 312.0, 272.0)
    reference = Reference(substance, gas, fraction, 272.0)
    for radius in (2e-8, 3e-7, 5e-6):
        for accommodation in ((1.0, 1.0), (0.1, 0.5)):
            rate, own = rate_of(properties, radius, (T_GROWTH, P_GROWTH, fraction), accommodation)
            expected, temperature = reference.rate(
                [radius], (T_GROWTH, P_GROWTH, fraction), accommodation, properties.heat_capacity)
            # Near S = 1 the rate is a small difference: compare on the scale of its parts.
            scale = abs(expected) + 0.02 * abs(expected / (supersaturation - 1.0))
            assert np.abs(rate - expected) < 3e-4 * scale
            assert own == pytest.approx(temperature, abs=2e-3)


def test_continuum_limit_is_maxwells_law_with_stefan_flow():
    """Large droplets: r dr/dt = v_l (p D / R T) ln((1 - y_s)/(1 - y)), heat by conduction alone."""
    properties = properties_of()
    rate, own = rate_of(properties, 1e-3, (T_GROWTH, P_GROWTH, 0.012))
    film = 0.5 * (own + T_GROWTH)
    diffusivity = matter.diffusivity(WATER, ARGON)(film) * 101325.0 / P_GROWTH
    surface = WATER.saturation_pressure(own) / P_GROWTH
    flow = P_GROWTH * diffusivity / (R * film) * np.log((1 - surface) / (1 - 0.012))
    assert rate * 1e-3 == pytest.approx(flow * properties.molar_volume, rel=1e-3)
    conductivity = matter.moist_conductivity(ARGON, WATER, 0.012, film)
    heat = WATER.latent_heat(own) / properties.molar_volume * 1e-3 * rate
    assert heat == pytest.approx(conductivity * (own - T_GROWTH), rel=1e-3)


def test_free_molecular_limit_is_hertz_and_knudsens():
    """Tiny droplets: moles a second and area alpha (p_v - p_s) / sqrt(2 pi M R T).

    At one temperature (no latent heat), and with a vapour so thin that Stefan flow plays no part.
    """
    fraction, pressure, radius, surface = 1e-4, 10.0, 2e-8, 4e-4
    base = properties_of(fraction=fraction)
    low = np.zeros(base.log_pressure.size)
    low[-1] = np.log(surface)
    cold = replace(base, latent_heat_of=1e-9 * base.latent_heat_of, log_pressure=low)
    for alpha in (1.0, 0.3):
        rate, own = rate_of(cold, radius, (T_GROWTH, pressure, fraction), (alpha, 1.0))
        kelvin = np.exp(2 * WATER.surface_tension(own) * cold.molar_volume / (R * own * radius))
        driving = pressure * fraction - surface * kelvin
        flux = alpha * driving / np.sqrt(2 * np.pi * WATER.molar_mass * R * T_GROWTH)
        assert rate == pytest.approx(flux * cold.molar_volume, rel=3e-4)


def test_heat_of_tiny_droplets_is_that_of_molecules_that_hit_them():
    """n c / 4 (cv + R/2) (T_d - T) alpha_T per area (Kennard 1938), against the latent heat."""
    properties = properties_of()
    radius = 5e-9
    rate, own = rate_of(properties, radius, (T_GROWTH, 300.0, 0.9), (0.01, 0.7))
    film = 0.5 * (own + T_GROWTH)
    speed = np.sqrt(8 * R * film / (np.pi * properties.gas_molar_mass))
    carried = 300.0 / (R * T_GROWTH) * speed / 4 * (properties.heat_capacity - R / 2)
    heat = WATER.latent_heat(own) / properties.molar_volume * rate
    assert heat == pytest.approx(0.7 * carried * (own - T_GROWTH), rel=2e-3)


def test_linear_textbook_law_is_the_limit_near_saturation():
    """r dr/dt = (S - 1) / (F_k + F_d) (Rogers and Yau 1989, section 7) as S -> 1; too fast above.

    With a mole fraction at the surface the slope of the vapour pressure is L / (R T^2), so that
    F_k has no -1 beside L / (R T); Stefan flow multiplies F_d by 1 - y_s.
    """
    radius, errors = 1e-2, []
    saturated = float(WATER.saturation_pressure(T_GROWTH)) / P_GROWTH
    for supersaturation in (1.005, 1.5, 2.0, 3.0):
        fraction = saturated * supersaturation
        properties = properties_of(fraction=fraction, own=T_GROWTH)
        rate, _ = rate_of(properties, radius, (T_GROWTH, P_GROWTH, fraction))
        f_k, f_d = resistances(T_GROWTH, P_GROWTH, properties.molar_volume, fraction)
        linear = (supersaturation - 1) / (f_k + f_d * (1 - saturated))
        errors.append(float(linear / (rate[0] * radius)) - 1.0)
    assert errors[0] == pytest.approx(0.0, abs=2e-3)
    # The linear law is 7 to 30 percent too fast at S of 1.5 to 3 (the project's own figures).
    assert errors[1:] == sorted(errors[1:])
    assert 0.04 < errors[1] < 0.15
    assert 0.15 < errors[3] < 0.40


def resistances(temperature, pressure, molar_volume, fraction, gas=ARGON):
    """Return F_k and F_d of the linear law [s/m^2]."""
    latent = float(WATER.latent_heat(temperature))
    conductivity = float(matter.moist_conductivity(gas, WATER, fraction, temperature))
    diffusivity = float(matter.diffusivity(WATER, gas)(temperature)) * 101325.0 / pressure
    saturated = float(WATER.saturation_pressure(temperature))
    return (latent**2 / (R * temperature**2 * conductivity * molar_volume),
            R * temperature / (saturated * diffusivity * molar_volume))


@pytest.mark.parametrize("celsius", [-10.0, 0.0, 30.0])
def test_latent_heat_slows_growth_by_the_ratio_of_the_resistances(celsius):
    """Without the latent heat growth is 1 + F_k / F_d times as fast: 1.85 at 0 C, 900 mb.

    F_k = 7.18e9 and F_d = 8.40e9 s/m^2 belong to Mason's table 1971 (273 K, 900 mb); its F_k is
    that of a vapour density, (L/(R T) - 1) / (L/(R T)) = 0.95 of that of a mole fraction.
    """
    temperature, pressure = 273.15 + celsius, 9e4
    fraction = 1.001 * float(WATER.saturation_pressure(temperature)) / pressure
    warm = growth_properties(WATER, AIR, fraction, temperature - 15, temperature + 15, temperature)
    cold = replace(warm, latent_heat_of=1e-9 * warm.latent_heat_of)
    gas = (temperature, pressure, fraction)
    ratio = float((rate_of(cold, 1e-2, gas)[0] / rate_of(warm, 1e-2, gas)[0])[0])
    f_k, f_d = resistances(temperature, pressure, warm.molar_volume, fraction, AIR)
    assert ratio == pytest.approx(1 + f_k / (f_d * (1 - fraction)), rel=2e-3)
    if celsius == 0.0:
        assert ratio == pytest.approx(1 + 7.18 / 0.95 / 8.40, rel=0.01)


@settings(max_examples=30, deadline=None)
@given(radius=st.floats(-8.3, -5.0), fraction=st.floats(0.003, 0.03), alpha=st.floats(0.02, 1.0))
def test_growing_droplets_are_warm_and_shrinking_ones_cold(radius, fraction, alpha):
    properties = properties_of()
    rate, own = rate_of(properties, 10**radius, (T_GROWTH, P_GROWTH, fraction), (alpha, 1.0))
    assert np.sign(rate) == np.sign(own - T_GROWTH)
    wetter, _ = rate_of(properties, 10**radius, (T_GROWTH, P_GROWTH, fraction * 1.01), (alpha, 1.0))
    assert wetter > rate


def test_kelvins_critical_radius_neither_grows_nor_shrinks():
    """ln S = 2 sigma v / (R T r): a droplet of that radius is in balance."""
    supersaturation = 2.0
    fraction = supersaturation * float(WATER.saturation_pressure(T_GROWTH)) / P_GROWTH
    properties = properties_of(own=T_GROWTH)
    critical = 2 * float(WATER.surface_tension(T_GROWTH)) * properties.molar_volume / (
        R * T_GROWTH * np.log(supersaturation))
    gas = (T_GROWTH, P_GROWTH, fraction)
    smaller, larger = (rate_of(properties, f * critical, gas)[0] for f in (0.97, 1.03))
    assert smaller < 0 < larger
    free = rate_of(properties, 100 * critical, gas)[0]
    assert np.abs(rate_of(properties, critical, gas)[0]) < 2e-3 * free


# Tables in print.


@pytest.mark.published
@pytest.mark.parametrize(("knudsen", "alpha", "printed"), [
    (0.01, 1, 0.99289), (0.01, 0.5, 0.97991), (0.01, 0.1, 0.88718), (0.01, 0.04, 0.75349),
    (0.1, 1, 0.92877), (0.1, 0.5, 0.82643), (0.1, 0.1, 0.43923), (0.1, 0.04, 0.23383),
    (1, 1, 0.49460), (1, 0.5, 0.29805), (1, 0.1, 0.07132), (1, 0.04, 0.02939),
    (10, 1, 0.07264), (10, 0.5, 0.03690), (100, 1, 0.00748), (100, 0.1, 0.00075),
])
def test_fuchs_sutugin_factor(knudsen, alpha, printed):
    """Table computed from Fuchs and Sutugin 1971; textbook value 0.494 at Kn = 1, alpha = 1."""
    assert float(transition_factor(knudsen, alpha)) == pytest.approx(printed, abs=6e-6)


@given(knudsen=st.floats(1e-6, 1e-4), alpha=st.floats(0.05, 1.0))
def test_fuchs_sutugin_near_the_continuum(knudsen, alpha):
    """1 - (4/(3 alpha) - 0.623) Kn, and alpha times 0.75 / Kn at the other end."""
    slope = 4 / (3 * alpha) - 0.623
    assert float(transition_factor(knudsen, alpha)) == pytest.approx(1 - slope * knudsen, abs=1e-5)
    assert float(transition_factor(1 / knudsen, alpha)) == pytest.approx(
        0.75 * alpha * knudsen, rel=2e-3)


def test_mean_free_paths_against_the_kinetic_theory_of_hard_spheres():
    """Air at 298 K, 1 atm: 65.1 nm from its viscosity (Seinfeld and Pandis 2006, table 9.3).

    With eta = 0.499 rho c l and K = f eta c_v / M (Eucken, f = 1.96 for air, from memory) the
    path of heat is 3 x 0.499 f c_v / (c_v + R/2) times as long.
    """
    path = float(heat_mean_free_path(0.0261, 101325.0 / (R * 298.0), mean_speed(298.0, 0.028964),
                                     29.1, R))
    capacity = 29.1 - R
    expected = 3 * 0.499 * 1.96 * capacity / (capacity + R / 2) * 65.1e-9
    assert path == pytest.approx(expected, rel=0.05)
    # Vapour in air: 3 D / c with 2.49e-5 m2/s and 592 m/s is 126 nm.
    assert float(vapour_mean_free_path(2.49e-5, mean_speed(298.0, 0.018015))) == pytest.approx(
        126e-9, rel=0.01)


MASON = {  # seconds to grow, NaCl nuclei of 1e-14, 1e-13 and 1e-12 g
    5: (1000, 320, 62),  # printed as 4 um: all three columns fit 5 um and are far off 4 um
    10: (2700, 1800, 870), 20: (8500, 7400, 5900), 30: (17500, 16000, 14500),
    50: (44500, 43500, 41500),
}


@pytest.mark.published
@pytest.mark.parametrize("column", [0, 1, 2])
def test_masons_table_of_growth_times(column):
    """Mason 1971 (Rogers and Yau 1989, table 7.2): S - 1 = 0.05 %, 900 mb, 273 K, r0 0.75 um.

    growth_rate with the table's own constants: L 2.5e6 J/kg, K 2.40e-2 W/(m K), D 2.21e-5 m2/s at
    1000 mb, e_s 611 Pa, sigma 0.0756 N/m; solute as b/r^3 (i = 2) taken off the surface, that is
    added to the vapour far away. The row printed as 4 um is a slip for 5 um; those of 1 and 2 um
    sit at the Koehler barrier and are no test. The book's F_k is 5 percent smaller (a vapour
    density at the surface, here a mole fraction), its times so 2.4 percent shorter.
    """
    temperature, pressure, molar_mass = 273.0, 9e4, 0.018015
    constant = np.array([0.0, 0.0, 0.0, 1.0])
    steepness = 2.5e6 * molar_mass / (R * temperature)
    base = growth_properties(WATER, AIR, 0.0068, 263.0, 283.0, temperature)
    scaled = 10.0 / temperature
    table = replace(
        base, middle=temperature, half_width=10.0,
        log_pressure=np.array([0.0, 0.0, steepness * scaled, np.log(611.0)]),
        conductivity_of=2.40e-2 * constant,
        diffusivity_of=2.21e-5 * 1e5 / temperature * constant,
        latent_heat_of=2.5e6 * molar_mass * constant, tension_of=0.0756 * constant,
        # Molecules so fast that no radius is small against their path: the table knows no
        # transition regime.
        molar_volume=molar_mass / 1000.0, vapour_molar_mass=1e-10, gas_molar_mass=1e-10,
    )
    mass = (1e-17, 1e-16, 1e-15)[column]
    solute = 3 * 2 * molar_mass * mass / (4 * np.pi * 0.05844 * 1000.0)
    assert solute == pytest.approx(1.47e-21 * 10**column, rel=0.01)

    def speed(_, radius):
        share = 611.0 / pressure * (1.0005 + solute / radius**3)
        return rate_of(table, radius, (temperature, pressure, share[0]))[0]

    radii = np.array(list(MASON)) * 1e-6

    def passed(_, radius):
        return radius[0] - 50e-6

    passed.terminal = True
    found = solve_ivp(speed, (0, 6e4), [0.75e-6], method="LSODA", rtol=1e-6, atol=1e-12,
                      events=passed)
    times = np.interp(radii, found.y[0], found.t)
    printed = np.array([row[column] for row in MASON.values()], dtype=float)
    assert times[2:] == pytest.approx(printed[2:], rel=0.04)
    assert times[1] == pytest.approx(printed[1], rel=0.08)
    assert times[0] == pytest.approx(printed[0], rel=0.13)
    # And the trap itself: 4 um is reached far earlier than printed.
    early = float(np.interp(4e-6, found.y[0], found.t))
    assert early < 0.87 * printed[0]


EVAPORATION = [  # Celsius, RH, measured d(r^2)/dt [um^2/s], allowed relative difference
    (25.0, 0.0125, -367.5, 0.035),  # dry runs: RH is 0 to 0.025 and itself a fitted value
    (20.0, 0.0125, -300.1, 0.035),
    (25.0, 0.517, -152.1, 0.03), (25.0, 0.590, -126.3, 0.03), (25.0, 0.662, -102.4, 0.03),
    (25.0, 0.722, -81.0, 0.045), (20.9, 0.675, -88.8, 0.03), (16.9, 0.846, -34.7, 0.05),
    (25.0, 0.764, -64.6, 0.11),  # known to disagree: 0.01 of RH is 4 percent of the rate there
]


@pytest.mark.published
@pytest.mark.parametrize(("celsius", "humidity", "measured", "allowed"), EVAPORATION)
def test_measured_evaporation_of_single_water_droplets(celsius, humidity, measured, allowed):
    """Levitated droplets sized by light scattering, 26 to 8 um (open data, zenodo 351456317)."""
    temperature = 273.15 + celsius
    fraction = humidity * float(WATER.saturation_pressure(temperature)) / 101325.0
    properties = growth_properties(WATER, AIR, fraction, 255.0, 310.0, temperature - 8.0)
    radii = np.linspace(13e-6, 26e-6, 14)
    rate, own = rate_of(properties, radii, (temperature, 101325.0, fraction),
                        guess=temperature - 5.0)
    slopes = 2 * radii * rate * 1e12
    assert np.ptp(slopes) < 0.02 * abs(slopes.mean())
    assert slopes.mean() == pytest.approx(measured, rel=allowed)
    assert np.all(own < temperature)


@pytest.mark.published
@pytest.mark.parametrize(("ratio", "temperature", "density"), [
    (0.8956, 0.9690, 0.9243), (0.7840, 0.9328, 0.8405), (0.6560, 0.8865, 0.7400),
    (0.5283, 0.8333, 0.6339),
])
def test_isentropic_table(ratio, temperature, density):
    """NACA Report 1135 (1953), gamma = 1.4, Mach 0.4 to 1: T/T0 and rho/rho0 at p/p0."""
    found = float(adiabatic_temperature(ratio, 1.0, 1.0, 3.5 * R))
    assert found == pytest.approx(temperature, abs=1e-4)
    assert ratio / found == pytest.approx(density, abs=1e-4)


@pytest.mark.published
@pytest.mark.parametrize(("start", "levels", "expected"), [
    (293.0, (1000.0, 500.0), 240.3583), (303.15, (1000.0, 900.0), 294.16),
    (303.15, (1000.0, 864.89), 290.83),
])
def test_poissons_relation_of_dry_air(start, levels, expected):
    """Printed examples of general meteorological libraries, kappa = 2/7."""
    found = float(adiabatic_temperature(levels[1], start, levels[0], 3.5 * R))
    assert found == pytest.approx(expected, abs=6e-3)


@pytest.mark.published
@pytest.mark.parametrize(("expansion", "supersaturation", "allowed"), [
    (1.252, 4.2, 0.03), (1.375, 7.9, 0.03),
])
def test_wilsons_expansions(expansion, supersaturation, allowed):
    """C. T. R. Wilson 1897: air saturated near 20 C, v2/v1 1.252 (rain, S 4.2), 1.375 (fog, 7.9).

    The vapour takes part in the expansion, gamma is that of moist air.
    """
    start = 293.15
    fraction = float(WATER.saturation_pressure(start)) / 101325.0
    heat_capacity = float(matter.moist_heat_capacity(AIR, WATER, fraction, 280.0))
    gamma = heat_capacity / (heat_capacity - R)
    pressure = expansion**-gamma
    cold = float(adiabatic_temperature(pressure, start, 1.0, heat_capacity))
    assert cold == pytest.approx(start * expansion ** (1 - gamma))
    ratio = fraction * 101325.0 * pressure / float(WATER.saturation_pressure(cold))
    assert ratio == pytest.approx(supersaturation, rel=allowed)


@pytest.mark.published
def test_moist_heat_capacity_against_richarz():
    """1/(gamma - 1) = sum x_i / (gamma_i - 1) (Richarz 1906): argon, 2 percent vapour: 1.65334."""
    heat_capacity = float(matter.moist_heat_capacity(ARGON, WATER, 0.02, 280.0))
    assert heat_capacity / (heat_capacity - R) == pytest.approx(1.65334, abs=3e-4)


# Births, hold, pressure.


@settings(max_examples=25, deadline=None)
@given(centre=st.floats(0.3, 0.7), width=st.floats(0.05, 0.2), tilt=st.floats(-3.0, 3.0),
       classes=st.integers(2, 8))
def test_birth_classes_sum_polynomials_exactly(centre, width, tilt, classes):
    """A Gauss rule of c nodes has the moments of its weight function to degree 2 c - 1."""
    time = np.linspace(0.0, 1.0, 401)
    log_rate = -0.5 * ((time - centre) / width) ** 2 + tilt * time
    births = births_from_rate(time, log_rate, classes)
    exact_time = np.linspace(0.0, 1.0, 20001)
    rate = np.exp(-0.5 * ((exact_time - centre) / width) ** 2 + tilt * exact_time)
    rate[rate < 1e-6 * rate.max()] = 0.0
    assert births.weights.sum() == pytest.approx(1.0, abs=1e-12)
    assert np.all(births.weights > 0)
    assert np.all(np.diff(births.times) > 0)
    whole = np.trapezoid(rate, exact_time)
    for degree in range(2 * classes):
        exact = np.trapezoid(rate * (exact_time - 0.5) ** degree, exact_time) / whole
        assert births.weights @ (births.times - 0.5) ** degree == pytest.approx(exact, abs=3e-6)
        fine = births.finer[0].weights @ (births.finer[0].times - 0.5) ** degree
        assert fine == pytest.approx(exact, abs=3e-6)
    # What is a polynomial in the time of birth is carried over to the finer classes exactly.
    def smooth_in_birth(at):
        return (at - 0.3) ** (classes - 1)
    finest = births.finer[0]
    carried = finest.carry @ smooth_in_birth(births.times)
    inside = np.abs(finest.times - centre) < 3 * width
    assert carried[inside] == pytest.approx(smooth_in_birth(finest.times)[inside], abs=1e-6)


def test_effective_duration_median_and_peak():
    """A Gaussian rate lasts sqrt(2 pi) sigma times its peak; half is born at its centre."""
    time = np.linspace(0.0, 10e-3, 4001)
    births = births_from_rate(time, -0.5 * ((time - 4e-3) / 4e-4) ** 2 + 50.0, 6)
    assert births.effective == pytest.approx(np.sqrt(2 * np.pi) * 4e-4, rel=1e-5)
    assert births.median == pytest.approx(4e-3, abs=1e-7)
    assert births.peak == pytest.approx(4e-3, abs=1e-5)
    assert births.spread == pytest.approx(4e-4, rel=1e-3)
    uneven = np.sort(np.concatenate([time, time[1000:2000] + 1e-6]))
    again = births_from_rate(uneven, -0.5 * ((uneven - 4e-3) / 4e-4) ** 2, 6)
    assert again.effective == pytest.approx(births.effective, rel=1e-5)


def test_births_at_a_threshold_and_at_once():
    time = np.linspace(0.0, 1.0, 101)
    rising = np.minimum(0.5 + time, 1.2)
    assert births_at_threshold(time, rising, 1.0).median == pytest.approx(0.5)
    assert births_at_threshold(time, rising, 5.0).median == pytest.approx(0.7, abs=0.01)
    assert births_at_threshold(time, rising, 0.1).median == 0.0
    once = births_at_once(0.25)
    assert (once.median, once.effective, list(once.weights)) == (0.25, 0.0, [1.0])


def hold_record(seed, noise=18.0, slope=0.0):
    """Return time, the true pressure, a noisy one and the classical ln J of any pressure."""
    time = np.arange(0.0, 14e-3, 2e-5)
    fall = np.clip((time - 5e-3) / 3e-3, 0, 1)
    rise = np.clip((time - 9e-3) / 2e-4, 0, 1)
    true = 9e4 + (5.5e4 - 9e4) * 0.5 * (1 - np.cos(np.pi * fall))
    true = true + (7e4 - 5.5e4) * 0.5 * (1 - np.cos(np.pi * rise))
    inside = (time > 8e-3) & (time < 9e-3)
    true = true + slope * np.where(inside, time - 8.5e-3, 0.0)
    heat_capacity = float(matter.moist_heat_capacity(ARGON, WATER, 0.0085, 270.0))

    def log_rate(pressure):
        own = adiabatic_temperature(pressure, 297.0, 9e4, heat_capacity)
        ratio = 0.0085 * pressure / WATER.saturation_pressure(own)
        liquid = (WATER.surface_tension(own), WATER.density(own), WATER.molar_mass)
        return classical_log_rate(own, 0.0085 * pressure, ratio, liquid)

    generator = np.random.default_rng(seed)
    return time, true, true + noise * generator.standard_normal(time.size), log_rate


def test_settled_hold_removes_the_bias_of_the_effective_duration():
    """Evaluated sample by sample, a noisy pressure biases J by 1.25 to 2.4; settled it must not."""
    raw, settled, peaks = [], [], []
    for seed in range(12):
        time, true, recorded, log_rate = hold_record(seed)
        exact = births_from_rate(time, log_rate(true)).effective
        raw.append(births_from_rate(time, log_rate(recorded)).effective / exact)
        smoothed, noise = smooth(recorded)
        held = settle_hold(time, recorded, smoothed, log_rate(smoothed), noise)
        births = births_from_rate(time, log_rate(held))
        settled.append(births.effective / exact)
        peaks.append(np.exp(log_rate(held).max() - log_rate(true).max()))
        away = np.abs(time - 8.5e-3) > 0.7e-3
        assert np.array_equal(held[away], smoothed[away])
    assert np.mean(raw) < 0.9
    assert np.mean(settled) == pytest.approx(1.0, abs=0.03)
    assert np.std(settled) < 0.05
    assert np.mean(peaks) == pytest.approx(1.0, abs=0.03)


def test_a_sloping_hold_is_followed():
    """A tilt of 400 Pa over the hold is not flattened: its lowest end is known to the noise."""
    off = []
    for seed in range(8):
        time, true, recorded, log_rate = hold_record(seed, slope=4e5)
        smoothed, noise = smooth(recorded)
        held = settle_hold(time, recorded, smoothed, log_rate(smoothed), noise)
        best = int(np.argmax(log_rate(true)))
        off.append(held[best] - true[best])
    assert np.sqrt(np.mean(np.square(off))) < 30.0


def test_a_hold_of_few_samples_goes_on_past_them_for_its_duration_only():
    """Six samples over 1 ms: nobody is born where the pressure may have risen, but may have been.

    A box of 1 ms sampled at any phase holds 1 ms on average only with the half step on either side
    (the trapezoidal rule is exact for a box at random phase).
    """
    durations, ends = [], []
    for phase in np.linspace(0.0, 2e-4, 20, endpoint=False):
        time = np.arange(0.0, 4e-3, 2e-4) + phase
        inside = (time >= 1.5e-3) & (time < 2.5e-3)
        births = births_from_rate(time, np.where(inside, 0.0, -300.0))
        durations.append(births.effective)
        ends.append(births.last - time[inside][-1])
        assert births.lengthening == pytest.approx(
            np.log(births.effective / (time[inside][-1] - time[inside][0])), abs=0.02)
    assert np.mean(durations) == pytest.approx(1e-3, rel=1e-6)
    assert np.max(ends) < 5e-5


def test_smoothing_follows_a_curve():
    """An expansion along a cosine: a mean over a window lies above it by the window squared."""
    time, true, recorded, _ = hold_record(5, noise=9.0)
    steep = (time > 7e-3) & (time < 7.9e-3)
    assert abs(np.mean((smooth(recorded)[0] - true)[steep])) < 4.0


def test_rims_that_still_settle_do_not_bend_the_hold():
    """A flat hold reached and left along a cosine: a parabola through it would bend all of it.

    With parabolas alone the standard deviation of the effective duration was 1.1 percent here.
    """
    off = []
    for seed in range(24):
        time, true, recorded, log_rate = hold_record(100 + seed, noise=9.0)
        exact = births_from_rate(time, log_rate(true))
        smoothed, noise = smooth(recorded)
        found = births_from_rate(
            time, log_rate(settle_hold(time, recorded, smoothed, log_rate(smoothed), noise)))
        off.append((found.effective / exact.effective - 1.0, found.median - exact.median))
    effective, median = np.array(off).T
    assert np.mean(effective) == pytest.approx(0.0, abs=0.012)
    assert np.std(effective) < 0.007
    assert np.std(median) < 3.5e-6


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), noise=st.floats(0.5, 50.0), height=st.floats(3e3, 4e4))
def test_smoothing_keeps_corners_and_lowers_the_noise(seed, noise, height):
    count = 1500
    ramp = np.clip((np.arange(count) - 500) / 60.0, 0.0, 1.0)
    true = 9e4 - height * ramp
    recorded = true + noise * np.random.default_rng(seed).standard_normal(count)
    smoothed, found = smooth(recorded)
    assert found == pytest.approx(noise, rel=0.25)
    # Nowhere further off than noise of a single sample allows, corners included.
    assert np.abs(smoothed - true).max() < 6.0 * noise
    flat = np.r_[50:450, 620:1450]
    assert np.std((smoothed - true)[flat]) < 0.35 * noise


def test_smoothing_bridges_gaps_and_leaves_a_clean_record_alone():
    clean = 9e4 - 100.0 * np.arange(200.0)
    smoothed, noise = smooth(clean)
    assert smoothed == pytest.approx(clean)
    assert noise < 1e-6
    gappy = clean.copy()
    gappy[50:53] = np.nan
    assert smooth(gappy)[0] == pytest.approx(clean)


def test_lag_of_a_gauge_is_undone():
    """A first-order lag solved by an ordinary differential equation and taken back."""
    lag = 5e-4
    time = np.linspace(0.0, 20e-3, 2001)

    def true(at):
        return 9e4 - 2e4 * 0.5 * (1 - np.cos(np.pi * np.clip((at - 5e-3) / 5e-3, 0, 1)))

    shown = solve_ivp(lambda t, p: (true(t) - p) / lag, (0, 20e-3), [9e4], t_eval=time,
                      rtol=1e-9, atol=1e-6, max_step=1e-4).y[0]
    assert np.abs(shown - true(time)).max() > 500.0
    assert undo_lag(time, shown, lag) == pytest.approx(true(time), abs=15.0)


# From the bench to growth.


def test_setup_from_a_gauge_against_the_expansion_worked_by_hand(make_bench):
    """T by entropy with the heat capacity at every temperature, S over the liquid, hold density."""
    from scatterfit.forward.simulate import pressure_profile

    bench = make_bench()
    time = np.arange(-5e-3, 0.1, 2e-5)
    pressure = pressure_profile(time, (9e4, 55e3, 70e3), 1e-3)
    setup = growth_setup(bench, time, pressure)

    def expanded(level):
        """Return T from the integral of cp dT / T = R ln(p/p0), cp varying with T."""
        def lacking(temperature):
            grid = np.linspace(297.0, temperature, 200)
            capacity = matter.moist_heat_capacity(ARGON, WATER, 0.0085, grid)
            return np.trapezoid(capacity / grid, grid) - R * np.log(level / 9e4)
        return brentq(lacking, 150.0, 297.0)

    assert setup.path.reference_temperature == pytest.approx(expanded(70e3), abs=0.01)
    assert setup.hold.temperature == pytest.approx(expanded(55e3), abs=0.02)
    assert setup.hold.pressure == pytest.approx(55e3, rel=1e-5)
    ratio = 0.0085 * 70e3 / float(WATER.saturation_pressure(expanded(70e3)))
    assert setup.growth_saturation_ratio == pytest.approx(ratio, rel=1e-3)
    # The hold is 1 ms; births also come from its shoulders, so it counts for somewhat more.
    assert 1.0e-3 < setup.hold.effective < 1.5e-3
    assert setup.births.median == pytest.approx(8.5e-3, abs=1e-4)
    assert setup.clock_known


@pytest.mark.parametrize(("vapour", "fraction"), [
    ({"mole_fraction": 0.01}, 0.01),
    ({"partial_pressure_kPa": 1.8}, 0.02),
    ({"saturation_ratio": 0.5}, None), ({"dew_point_K": 285.0}, None),
])
def test_vapour_is_stated_in_one_of_four_ways(make_bench, vapour, fraction):
    bench = make_bench(vapour={"mole_fraction": None, **vapour})
    time = np.arange(-5e-3, 0.05, 5e-5)
    setup = growth_setup(bench, time, np.full(time.size, 9e4) - 2e4 * (time > 0.01))
    if fraction is None:
        saturated = (0.5 * WATER.saturation_pressure(297.0) if "saturation_ratio" in vapour
                     else WATER.saturation_pressure(285.0))
        fraction = float(saturated) / 9e4
    assert setup.vapour_fraction == pytest.approx(fraction, rel=1e-6)
