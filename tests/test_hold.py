"""The gauge: wrong units refused; the duration of a hold from few samples and from noise."""

import numpy as np
import pytest

from scatterfit.droplet_growth.births import births_from_rate
from scatterfit.droplet_growth.pressure import smooth
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.errors import TraceError
from scatterfit.forward.simulate import Scenario, hold_pressure, pressure_profile
from scatterfit.measured_pulse.prepare import prepare_setup


def steep_hold(time, begin, length):
    """Return ln of a rate that is flat over a hold and falls by e^60 within half of it."""
    out = np.maximum(begin - time, time - begin - length)
    return -60.0 * np.clip(out / (0.5 * length), 0.0, 1.0) ** 2


def test_few_samples_give_the_effective_duration_on_average():
    """Against a fine sum; samples fall anywhere in the hold, four to its length."""
    fine = np.linspace(0.0, 6e-3, 60_001)
    truth = np.trapezoid(np.exp(steep_hold(fine, 2e-3, 1e-3)), fine)
    found = []
    for phase in np.linspace(0.0, 0.25e-3, 40, endpoint=False):
        time = phase + np.arange(0.0, 5.5e-3, 0.25e-3)
        found.append(births_from_rate(time, steep_hold(time, 2e-3, 1e-3)).effective)
    assert np.mean(found) == pytest.approx(truth, rel=0.02)


def test_the_sigma_of_a_duration_is_its_scatter(make_bench):
    """One pulse seen by gauges of all speeds, with noise; the truth from a fast and silent one."""
    bench = make_bench()
    scenario = Scenario(1e9, 0.03, 1e5, 0.01, 1e-3, 0.78)
    levels = (bench.chamber.pressure, hold_pressure(bench, scenario), 0.78 * bench.chamber.pressure)
    rng = np.random.default_rng(5)
    fine = np.arange(-5e-3, 0.03, 1e-5)
    truth = growth_setup(bench, fine, pressure_profile(fine, levels, 1e-3)).hold.effective
    off = []
    for rate in np.geomspace(4e3, 2e5, 60):
        time = np.arange(-5e-3 + rng.uniform(0, 1 / rate), 0.03, 1 / rate)
        noise = 2e-4 * levels[0] * rng.standard_normal(time.size)
        hold = growth_setup(bench, time, pressure_profile(time, levels, 1e-3) + noise).hold
        sigma = np.hypot(hold.effective_sigma, 0.22 / hold.samples)
        off.append((hold.effective / truth - 1.0) / sigma)
    assert 0.5 < np.sqrt(np.mean(np.square(off))) < 1.4
    assert np.mean(np.abs(off) < 2.0) > 0.88


@pytest.mark.parametrize(("factor", "chamber", "parts"), [
    (10.0, {}, ["starts at 900 kPa", "chamber.pressure_kPa is 90 kPa", "its unit"]),
    (0.2, {}, ["starts at 18 kPa", "chamber.pressure_kPa"]),
    (1e3, {"pressure_kPa": None}, ["starts at 9e+04 kPa", "1 to 5000 kPa"]),
    (-1.0, {"pressure_kPa": None}, ["starts at -90 kPa"]),
    (1e-3, {"pressure_kPa": None}, ["starts at 0.09 kPa"]),
])
def test_a_pressure_that_cannot_be_is_one_line(make_bench, factor, chamber, parts):
    bench = make_bench(chamber=chamber)
    time = np.linspace(-5e-3, 0.03, 400)
    pressure = factor * pressure_profile(time, (9e4, 5.5e4, 7e4), 1e-3)
    with pytest.raises(TraceError) as error:
        prepare_setup(bench, time, {"pressure_kPa": pressure})
    assert "\n" not in str(error.value)
    assert all(part in str(error.value) for part in ["column pressure_kPa", *parts])


def test_a_last_sample_cut_short_is_no_expansion():
    """A file that ends in the middle of a number: 71.79 kPa becomes 7."""
    time = np.linspace(-5e-3, 0.03, 400)
    pressure = pressure_profile(time, (9e4, 5.5e4, 7.18e4), 1e-3)
    for place in (-1, 0):
        cut = pressure.copy()
        cut[place] = 7e3
        assert smooth(cut)[0] == pytest.approx(smooth(pressure)[0], rel=1e-3)
