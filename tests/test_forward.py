"""What channels show: spread, derivatives, low-pass, attenuation, forward light, first order."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import signal as scipy_signal
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline

from scatterfit.cloud_optics.single_droplet import scatter
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.errors import InvalidInputError
from scatterfit.files_simulate import simulate
from scatterfit.forward.cloud_state import CloudState, hermite
from scatterfit.forward.growth_model import Cloud, linear_growth, per_mole
from scatterfit.forward.light import cloud_light, look_up, moved_rows, spread_table
from scatterfit.forward.low_pass import low_pass
from scatterfit.forward.model import Channel, PulseModel, channel_signals
from scatterfit.forward.simulate import Scenario, hold_pressure, pressure_profile
from scatterfit.measured_pulse.prepare import pulse_kernel, pulse_model

BASE_SPREAD = 0.003
TIME = np.arange(-5e-3, 0.1, 1e-4)
DETECTORS = [
    {"column": "scatter1_V", "angle_deg": 30.0, "half_angle_deg": 2.0, "gain_V_m": 6e4,
     "time_constant_ms": 0.2, "angle_deg_sigma": 0.1},
    {"column": "scatter2_V", "angle_deg": 90.0, "half_angle_deg": 3.0, "time_constant_ms": 0.02},
]


@pytest.fixture(scope="module")
def bench(make_bench):
    """Return a bench with two detectors and a receiver of one degree."""
    return make_bench(detector=DETECTORS, transmission={"half_angle_deg": 1.0},
                      analysis={"max_radius_um": 5.0})


@pytest.fixture(scope="module")
def optics(bench, store):
    """Return the setup of one pulse, its kernel and the relative index."""
    setup = growth_setup(bench, TIME, pressure_profile(TIME, (9e4, 55e3, 70e3), 1e-3))
    kernel, relative, _ = pulse_kernel(setup, store)
    return setup, kernel, relative


@pytest.fixture(scope="module")
def model(optics):
    """Return the forward model of that pulse."""
    setup, kernel, relative = optics
    return pulse_model(setup, kernel, relative, (0.0, 0.0))


CLOUD = Cloud(number=np.log(8e9), variance=2e-5, angles=(0.0, 0.0))


# The spread of a cloud.


@pytest.mark.parametrize("variance", [1e-5, 1e-4, 2e-3])
def test_spread_table_against_the_kernels_own_widening(optics, model, variance):
    _, kernel, relative = optics
    wide = kernel.kernels[0].at(relative[0], spread=float(np.sqrt(BASE_SPREAD**2 + variance)))
    rows = np.vstack([wide.collected, wide.extinction, wide.extinction - wide.forward])
    grid = wide.log_radius_start + wide.step * np.arange(rows.shape[1])
    table = spread_table(model.light, variance)
    inside = (table.log_radius > np.log(1e-7)) & (table.log_radius < grid[-1] - 6 * variance**0.5)
    for i, row in enumerate(rows):
        expected = CubicSpline(grid, row)(table.log_radius[inside])
        # A lobe's own height is the scale: troughs of a sharp cloud lie two decades lower.
        scale = np.maximum(expected, 0.02 * np.exp(2 * table.log_radius[inside]))
        assert np.abs(table.values[i, inside] - expected).max() < 1e-3 * scale.max()
        assert np.median(np.abs(table.values[i, inside] / expected - 1)) < 2e-4


def test_spread_table_against_brute_force_quadrature(optics, model):
    """Averages over a normal distribution of ln r, by Gauss and Hermite's rule."""
    _, kernel, relative = optics
    base = kernel.kernels[0].at(relative[0])
    grid = base.log_radius_start + base.step * np.arange(base.extinction.size)
    nodes, weights = np.polynomial.hermite_e.hermegauss(60)
    table = spread_table(model.light, 9e-4)
    for row, curve in ((0, base.collected[0]), (1, base.collected[1]), (2, base.extinction)):
        spline = CubicSpline(grid, curve)
        for radius in (0.4e-6, 1e-6, 2.3e-6):
            expected = weights @ spline(np.log(radius) + 0.03 * nodes) / weights.sum()
            found = look_up(table, np.array([np.log(radius)]), 9e-4)[0][row, 0]
            assert found == pytest.approx(expected, rel=5e-4)


def test_wider_clouds_obey_the_heat_equation(model):
    """d/d(variance) is half the second derivative by ln r: slopes and bends by differences."""
    log_radius = np.log(np.linspace(0.3e-6, 3e-6, 400))
    table = spread_table(model.light, 2e-4)
    values, slopes, bends = look_up(table, log_radius, 2e-4)
    step = 1e-5
    above = look_up(spread_table(model.light, 2e-4 + step), log_radius, 2e-4 + step)[0]
    below = look_up(spread_table(model.light, 2e-4 - step), log_radius, 2e-4 - step)[0]
    scale = np.abs(bends).max(axis=1, keepdims=True)
    assert np.all(np.abs((above - below) / (2 * step) - bends) <= 0.02 * scale)
    shift = 1e-5
    right = look_up(table, log_radius + shift, 2e-4)[0]
    left = look_up(table, log_radius - shift, 2e-4)[0]
    scale = np.abs(slopes).max(axis=1, keepdims=True)
    assert np.all(np.abs((right - left) / (2 * shift) - slopes) <= 2e-3 * scale)
    # A variance a little off the table's is met to first order.
    near = look_up(table, log_radius, 2e-4 + 3e-6)[0]
    exact = look_up(spread_table(model.light, 2.03e-4), log_radius, 2.03e-4)[0]
    assert np.all(np.abs(near - exact) <= 3e-4 * np.abs(values).max(axis=1, keepdims=True))


def test_light_of_a_power_law_is_widened_in_closed_form():
    """Rows proportional to r^2 gain exp(2 s^2) from a normal spread s of ln r."""
    step = 0.003
    log_radius = np.log(1e-7) + step * np.arange(1500)
    light = cloud_light(np.exp(2 * log_radius)[None, :], log_radius[0], step)
    table = spread_table(light, 0.02**2)
    middle = slice(200, 1300)
    expected = np.exp(2 * log_radius + 2 * 0.02**2)
    assert table.values[0, middle] == pytest.approx(expected[middle], rel=2e-5)


def test_rows_at_a_longer_wavelength_are_those_of_smaller_droplets(model):
    """At one index a cross section over the wavelength squared depends on r / lambda alone."""
    shift = 2e-3
    plain = spread_table(model.light, 1e-5)
    moved = spread_table(moved_rows(model.light, [0, 2], shift), 1e-5)
    middle = plain.log_radius[200:-200]
    for row, expected in ((0, shift), (1, 0.0), (2, shift)):
        smaller = look_up(plain, middle - expected, 1e-5)[0][row]
        found = look_up(moved, middle, 1e-5)[0][row]
        size = np.abs(smaller).max()
        assert found == pytest.approx(np.exp(2 * expected) * smaller, rel=2e-4, abs=1e-6 * size)


def test_radii_beyond_the_table_take_its_end_values(model):
    table = spread_table(model.light, 1e-5)
    ends = np.array([table.log_radius[0] - 3.0, table.log_radius[-1] + 1.0])
    values = look_up(table, ends, 1e-5)[0]
    assert values[:, 0] == pytest.approx(table.values[:, 0])
    assert values[:, 1] == pytest.approx(table.values[:, -1], rel=1e-4)


# The chain behind the light.


@settings(max_examples=20, deadline=None)
@given(constant=st.floats(0.05, 30.0), seed=st.integers(0, 10**6))
def test_low_pass_against_a_general_linear_system(constant, seed):
    """1 / (1 + tau s) driven by straight lines between samples (scipy.signal.lsim)."""
    time = np.arange(300.0)
    drive = np.random.default_rng(seed).standard_normal(300).cumsum()
    start = np.array([drive[0] * constant])
    system = scipy_signal.StateSpace([[-1 / constant]], [[1.0]], [[1 / constant]], [[0.0]])
    expected = scipy_signal.lsim(system, drive, time, X0=start)[1]
    assert low_pass(time, drive, constant) == pytest.approx(expected, abs=1e-9)


def test_low_pass_of_uneven_samples_against_an_ode_solution():
    generator = np.random.default_rng(5)
    time = np.sort(generator.uniform(0, 1, 60))
    drive = np.sin(9 * time)
    found = solve_ivp(lambda t, y: (np.interp(t, time, drive) - y) / 0.05, (time[0], time[-1]),
                      [drive[0]], t_eval=time, rtol=1e-9, atol=1e-12, max_step=2e-3)
    stacked = low_pass(time, np.stack([drive, 2 * drive]), 0.05)
    assert stacked[0] == pytest.approx(found.y[0], abs=1e-6)
    assert stacked[1] == pytest.approx(2 * stacked[0])


def test_low_pass_of_a_sine_has_the_gain_and_lag_of_an_rc_filter():
    """1 / sqrt(1 + (omega tau)^2) and atan(omega tau)."""
    time = np.linspace(0.0, 2.0, 20001)
    omega, tau = 2 * np.pi * 5, 0.02
    late = time > 1.0
    expected = np.sin(omega * time - np.arctan(omega * tau)) / np.hypot(1, omega * tau)
    found = low_pass(time, np.sin(omega * time), tau)
    assert found[late] == pytest.approx(expected[late], abs=2e-6)
    assert low_pass(time, time, 0.0) is time


# Signals.


def average(model, cloud, row):
    """Return a cross section averaged over the births, from the spread table by splines [m^2]."""
    _, state = channel_signals(model, cloud, TIME)
    table = spread_table(model.light, cloud.variance)
    spline = CubicSpline(table.log_radius, table.values[row])
    mean = []
    for segment in state.segments:
        born = segment.radius > np.exp(table.log_radius[0])
        each = np.where(born, spline(np.log(np.maximum(segment.radius, 1e-9))), 0.0)
        mean.append(segment.weights @ each)
    return np.concatenate(mean), state.number_density


@pytest.mark.parametrize("number", [1e9, 4e10])
def test_signals_are_those_of_the_law(model, number):
    """gain n C exp(-n C_ext path), and exp(-n (C_ext - C_forward) path)."""
    cloud = replace(CLOUD, number=np.log(number))
    signals, state = channel_signals(model, cloud, TIME)
    grown = state.radius.min(axis=0) > 0.2e-6
    extinction, density = average(model, cloud, 2)
    for i, gain in ((0, 6e4), (1, 1.0)):
        light, _ = average(model, cloud, i)
        expected = gain * density * light * np.exp(-density * extinction * 0.12)
        expected = low_pass(TIME, expected, (2e-4, 2e-5)[i])
        assert signals[i].shape[grown] == pytest.approx(expected[grown], rel=2e-4)
    reduced, _ = average(model, cloud, 3)
    assert signals[2].shape[grown] == pytest.approx(np.exp(-density * reduced * 0.12)[grown],
                                                    rel=1e-5)
    before = TIME < 7e-3
    assert np.all(signals[0].shape[before] == 0.0)
    assert np.all(signals[2].shape[before] == 1.0)
    if number > 1e10:
        assert np.any(density * extinction * 0.12 > 0.06)


def test_forward_light_of_the_receiver_is_not_lost(optics, model):
    """C_ext and the light within one degree, by quadrature of dC/dOmega of single droplets.

    At 3 to 5 um and one degree half angle 2 to 8 percent of the extinction (the project's own
    figures); averaged over the spread of the base table.
    """
    _, kernel, relative = optics
    wavenumber = kernel.wavenumber
    theta = np.radians(np.linspace(0.0, 1.0, 41))
    nodes, weights = np.polynomial.hermite_e.hermegauss(20)
    table = spread_table(model.light, 0.0)
    shares = []
    for radius in (1e-6, 3e-6, 4.5e-6):
        sizes = wavenumber * radius * np.exp(BASE_SPREAD * nodes)
        light = scatter(sizes, relative[0], theta)
        mean = 0.5 * (light.perpendicular + light.parallel).T
        ring = np.trapezoid(2 * np.pi * np.sin(theta) * mean, theta, axis=1) / wavenumber**2
        forward = weights @ ring / weights.sum()
        area = np.pi * (sizes / wavenumber) ** 2
        extinction = weights @ (light.extinction_efficiency * area) / weights.sum()
        values = look_up(table, np.array([np.log(radius)]), 0.0)[0][:, 0]
        assert values[2] == pytest.approx(extinction, rel=2e-3)
        assert values[2] - values[3] == pytest.approx(forward, rel=5e-3)
        shares.append(forward / extinction)
    assert shares[0] < 0.02
    assert 0.02 < shares[1] < 0.08
    assert 0.02 < shares[2] < 0.12


NAMES = ("number", "scale", "delay", "variance", "accommodation", "temperature", "vapour",
         "bend", "creep", "stretch", "angle:0")
FINE = {"number": 2e-3, "scale": 1e-4, "delay": 2e-6, "variance": 1e-6, "accommodation": 2e-3,
        "temperature": 1e-5, "vapour": 1e-4, "bend": 1e-4, "creep": 1e-4, "stretch": 1e-3,
        "angle:0": 2e-4}


def moved(cloud, name, step):
    """Return a cloud with one parameter moved."""
    if name == "angle:0":
        return replace(cloud, angles=(cloud.angles[0] + step, *cloud.angles[1:]))
    return replace(cloud, **{name: getattr(cloud, name) + step})


@pytest.mark.parametrize("name", NAMES)
def test_derivatives_of_all_channels_against_differences(model, name):
    cloud = replace(CLOUD, scale=0.03, bend=0.01, creep=0.01, accommodation=-0.2)
    signals, _ = channel_signals(model, cloud, TIME, (name,))
    above, _ = channel_signals(model, moved(cloud, name, FINE[name]), TIME)
    below, _ = channel_signals(model, moved(cloud, name, -FINE[name]), TIME)
    # Nearer to the births a difference over a birth itself is no derivative; growth is solved
    # to the last sample, beyond which the cloud stands still.
    grown = (TIME > 12e-3) & (np.arange(TIME.size) < TIME.size - 2)
    for i, found in enumerate(signals):
        expected = (above[i].shape - below[i].shape)[grown] / (2 * FINE[name])
        size = np.abs(expected).max()
        if name == "angle:0" and i:
            assert size == 0.0
            assert not np.any(found.by[name])
            continue
        # Growth's derivatives are one-sided steps, those by the variance straight between nodes.
        assert np.abs(found.by[name][grown] - expected).max() < 0.05 * size


def test_derivatives_by_the_number_are_split_by_what_they_act_through(model):
    cloud = replace(CLOUD, number=np.log(3e10))
    signals, _ = channel_signals(model, cloud, TIME, ("number",))
    step = 1e-4
    # With the depletion held, a larger number only brightens and dims.
    above, _ = channel_signals(model, replace(cloud, number=cloud.number + step, depletion=-step),
                               TIME)
    below, _ = channel_signals(model, replace(cloud, number=cloud.number - step, depletion=step),
                               TIME)
    for i, found in enumerate(signals):
        held = (above[i].shape - below[i].shape) / (2 * step)
        parts = found.by["number_gain"] + found.by["number_extinction"]
        assert np.abs(parts - held).max() < 2e-3 * np.abs(held).max()
    assert not np.any(signals[2].by["number_gain"])
    assert signals[0].by["number_gain"] == pytest.approx(signals[0].shape)


def test_depletion_alone_changes_growth_and_not_the_light_of_each_droplet(model):
    cloud = replace(CLOUD, number=np.log(3e10))
    signals, _ = channel_signals(model, cloud, TIME, ("number", "depletion"))
    step = 2e-3
    above, _ = channel_signals(model, replace(cloud, depletion=step), TIME)
    below, _ = channel_signals(model, replace(cloud, depletion=-step), TIME)
    late = TIME > 12e-3
    for i, found in enumerate(signals):
        expected = (above[i].shape - below[i].shape)[late] / (2 * step)
        assert np.abs(found.by["depletion"][late] - expected).max() < 0.03 * np.abs(expected).max()


def test_a_thinner_cloud_is_dimmer_and_more_transparent(model):
    """At fixed radius d ln V = d ln n (1 - depth) for a detector, -depth d ln n for the beam."""
    setup = model.setup
    linear = linear_growth(setup, CLOUD, ("temperature",))
    radius_by = {"temperature": 0.0 * linear.log_radius_by["temperature"]}
    held = replace(linear, log_radius_by=radius_by,
                   log_density_by={"temperature": np.full(setup.path.time.size, -1.0)})
    channels = tuple(replace(c, path=8.0, time_constant=0.0) for c in model.channels)
    long = replace(model, channels=channels)
    signals, _ = channel_signals(long, CLOUD, TIME, ("temperature",), held)
    beam = signals[2].shape
    depth = -np.log(beam)
    assert depth.max() > 0.5
    assert signals[2].by["temperature"] == pytest.approx(beam * depth, abs=1e-9)
    extinction, density = average(model, CLOUD, 2)
    depth = density * extinction * 8.0
    late = TIME > 12e-3
    expected = -signals[0].shape * (1.0 - depth)
    assert signals[0].by["temperature"][late] == pytest.approx(expected[late], rel=5e-3)


def test_a_turned_detector_against_tables_made_at_that_angle(optics, model):
    setup, kernel, relative = optics
    shift = 4e-4
    turned = pulse_model(setup, kernel, relative, (shift, 0.0))
    exact, _ = channel_signals(turned, CLOUD, TIME)
    first, _ = channel_signals(model, replace(CLOUD, angles=(shift, 0.0)), TIME)
    plain, _ = channel_signals(model, CLOUD, TIME)
    moved_by = np.abs(exact[0].shape - plain[0].shape).max()
    assert np.abs(first[0].shape - exact[0].shape).max() < 0.05 * moved_by
    assert np.array_equal(first[1].shape, plain[1].shape)


@pytest.mark.parametrize("name", ["number", "scale", "accommodation", "temperature", "vapour",
                                  "bend", "creep"])
def test_growth_followed_to_first_order(model, name):
    """What first order leaves out falls with the square of the step."""
    names = (name,)
    start = replace(CLOUD, number=np.log(2e10))
    linear = linear_growth(model.setup, start, names)
    late = TIME > 12e-3
    left = []
    steps = {"number": 0.08, "scale": 0.02, "accommodation": 0.2, "temperature": 2e-3,
             "vapour": 0.02, "bend": 0.04, "creep": 0.04}
    for size in (steps[name], 0.5 * steps[name]):
        cloud = replace(start, **{name: getattr(start, name) + size})
        there = CloudState(linear, cloud, TIME)
        exact = CloudState(linear_growth(model.setup, cloud), cloud, TIME)
        plain = CloudState(linear, start, TIME)
        change = np.log(there.radius[:, late] / exact.radius[:, late])
        whole = np.abs(np.log(exact.radius[:, late] / plain.radius[:, late])).max()
        left.append(np.abs(change).max())
        assert left[-1] < 0.15 * whole
        assert there.number_density[late] == pytest.approx(exact.number_density[late], rel=2e-3)
    # One-sided differences leave a part that only halves.
    assert left[1] < 0.7 * left[0]


def test_finer_classes_of_births_are_those_of_many_solved_ones(bench, optics):
    """Six classes carried to 24 by polynomials, against 24 classes solved; the light of both."""
    setup, kernel, relative = optics
    many = growth_setup(bench, TIME, pressure_profile(TIME, (9e4, 55e3, 70e3), 1e-3), classes=24)
    assert setup.births.times.size < 10
    light = []
    for each in (setup, many):
        signals, _ = channel_signals(pulse_model(each, kernel, relative, (0.0, 0.0)), CLOUD, TIME)
        light.append([s.shape for s in signals])
    late = TIME > 12e-3
    for few, exact in zip(*light, strict=True):
        assert np.abs(few - exact)[late].max() < 5e-3 * np.abs(exact).max()


def test_a_stretched_hold_is_a_longer_hold(make_bench):
    """Births that last a tenth longer and end at the same time, by stretch and by a stated hold."""
    states = {"pressure": None, "growth": {"temperature_K": 270.0, "pressure_kPa": 70.0}}
    held = {"temperature_K": 245.0, "pressure_kPa": 55.0}
    short = growth_setup(make_bench(**states, pulse={"hold_ms": 1.0, **held}), duration=0.1)
    long = growth_setup(make_bench(**states, pulse={"hold_ms": 1.1, **held}), duration=0.1)
    time = np.array([3e-3, 1e-2, 3e-2, 9e-2])
    radii = []
    for setup, cloud in ((short, replace(CLOUD, stretch=np.log(1.1))),
                         (long, replace(CLOUD, delay=-0.05e-3))):
        state = CloudState(linear_growth(setup, cloud), cloud, time)
        assert state.growth.converged
        radii.append(state.growth.weights @ state.radius)
    # The recompression after it is a tenth longer too.
    assert radii[0] == pytest.approx(radii[1], rel=0.015)
    assert radii[0][-1] == pytest.approx(radii[1][-1], rel=7e-4)


@pytest.mark.parametrize("change", [{"duration": 0.105}, {"classes": 16}])
def test_growth_after_a_stated_hold_does_not_depend_on_the_nodes(make_bench, change):
    bench = make_bench(pressure=None, growth={"temperature_K": 270.0, "pressure_kPa": 70.0},
                       pulse={"hold_ms": 1.0, "temperature_K": 245.0, "pressure_kPa": 55.0})
    time = np.array([1e-2, 3e-2, 9e-2])
    mean = []
    for options in ({"duration": 0.1}, {"duration": 0.1, **change}):
        linear = linear_growth(growth_setup(bench, **options), CLOUD)
        mean.append(linear.growth.weights @ CloudState(linear, CLOUD, time).radius)
    assert mean[0] == pytest.approx(mean[1], rel=2e-4)


def test_number_is_that_of_the_undisturbed_growth_state(model):
    """Per mole of gas it is n R T / p; in the light it thins out as the gas warms."""
    path = model.setup.path
    expected = 5e9 * GAS_CONSTANT * path.reference_temperature / path.reference_pressure
    assert per_mole(model.setup, np.log(5e9)) == pytest.approx(expected)
    thin = replace(CLOUD, number=np.log(1e6))
    _, state = channel_signals(model, thin, TIME)
    assert state.number_density[-1] == pytest.approx(1e6, rel=1e-4)
    _, thick = channel_signals(model, replace(CLOUD, number=np.log(4e10)), TIME)
    assert thick.number_density[-1] < 0.997 * 4e10
    # During the hold the gas is thinner, by p / T.
    hold = model.setup.hold
    inside = np.argmin(np.abs(TIME - 8.5e-3))
    ratio = (hold.pressure / hold.temperature) / (path.reference_pressure
                                                  / path.reference_temperature)
    assert state.number_density[inside] / 1e6 == pytest.approx(ratio, rel=2e-3)


def test_hermite_interpolation_is_exact_for_cubics():
    nodes = np.array([0.0, 0.3, 1.0, 1.7])
    points = np.linspace(0.0, 1.7, 50)
    index = np.clip(np.searchsorted(nodes, points, side="right") - 1, 0, 2)
    width = np.diff(nodes)[index]
    t = (points - nodes[index]) / width

    def cubic(x):
        return 1 - 2 * x + 3 * x**2 - 0.5 * x**3

    found = hermite(cubic(nodes), -2 + 6 * nodes - 1.5 * nodes**2, index, t, width)
    assert found == pytest.approx(cubic(points), abs=1e-12)


def test_a_channel_without_a_gain_has_unit_gain(model):
    channels = tuple(replace(c, gain=None) if isinstance(c, Channel) else c for c in model.channels)
    free = PulseModel(model.setup, model.light, channels, model.extinction_row)
    with_gain, _ = channel_signals(model, CLOUD, TIME)
    without, _ = channel_signals(free, CLOUD, TIME)
    assert with_gain[0].shape == pytest.approx(6e4 * without[0].shape)


# Simulated pulses.


def test_pressure_profile_keeps_its_levels_and_never_overshoots():
    time = np.linspace(-5e-3, 0.1, 5001)
    found = pressure_profile(time, (9e4, 5e4, 7e4), 1e-3)
    assert (found.max(), found.min()) == (9e4, pytest.approx(5e4))
    assert np.all(found[time > 9.3e-3] == pytest.approx(7e4))
    held = (time > 8e-3) & (time < 9e-3)
    assert np.all(found[held] == pytest.approx(5e4))


def test_truth_of_a_simulated_pulse_is_consistent(make_bench, store):
    bench = make_bench(analysis={"max_radius_um": 5.0})
    pulse = simulate(bench, number=4e9, seed=2, rate=10e3, noise=0.01, store=store)[0]
    truth = pulse.truth
    assert truth["N_per_cm3"] == pytest.approx(4000.0)
    # The rate is the number taken back to the density of the hold, over the effective time.
    denser = (truth["p_nuc_kPa"] / truth["T_nuc"]) / (truth["p_growth_kPa"] / truth["T_growth"])
    rate = 4000.0 * denser / (1e-3 * truth["effective_ms"])
    assert truth["J_per_cm3_s"] == pytest.approx(rate)
    # The hold is as deep as the number asks for: the classical rate over the hold.
    assert truth["p_nuc_kPa"] * 1e3 == pytest.approx(
        hold_pressure(bench, Scenario(number=4e9)), rel=1e-4)
    assert truth["time_ms"][-1] == pytest.approx(100.0)
    assert truth["radius_um"][-1] == truth["final_radius_um"]
    assert np.all(np.diff(truth["radius_um"]) > 0)
    # The optical depth is what the transmission lost, less the noise.
    end = pulse.columns["transmitted_V"][-200:].mean() / 5.0
    assert -np.log(end) == pytest.approx(truth["optical_depth_end"], abs=1e-3)
    assert np.ptp(pulse.columns["scatter1_V"][pulse.time < 5e-3]) < 0.2
    # The same seed gives the same pulse, another one other noise.
    again = simulate(bench, number=4e9, seed=2, rate=10e3, noise=0.01, store=store)[0]
    other = simulate(bench, number=4e9, seed=3, rate=10e3, noise=0.01, store=store)[0]
    assert np.array_equal(pulse.columns["scatter1_V"], again.columns["scatter1_V"])
    assert not np.array_equal(pulse.columns["scatter1_V"], other.columns["scatter1_V"])


def test_simulations_that_cannot_be_made_say_so(make_bench, store):
    dry = make_bench(vapour={"mole_fraction": 1e-5})
    with pytest.raises(InvalidInputError, match="no hold pressure gives"):
        simulate(dry, store=store)
    unstated = make_bench(chamber={"pressure_kPa": None})
    with pytest.raises(InvalidInputError, match=r"chamber\.pressure_kPa is missing"):
        simulate(unstated, store=store)
