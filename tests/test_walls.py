"""Heat from the walls: against tables, a slab's other series, and conduction solved by lines."""

import copy
import math

import numpy as np
import pytest
from conftest import BENCH
from scipy.integrate import quad, solve_ivp

from scatterfit import matter
from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.cli_check import check_text
from scatterfit.constants import GAS_CONSTANT
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.droplet_growth.walls import (
    WallHeat,
    adiabatic_lifetime,
    centre_warming,
    core_part,
    layer_thickness,
    thermal_diffusivity,
    wall_heat,
)
from scatterfit.files_simulate import simulate
from scatterfit.forward.growth_model import Cloud, grow
from scatterfit.forward.simulate import pressure_profile
from scatterfit.measured_pulse.heat import heat_findings
from scatterfit.measured_pulse.measure import measure

STATED = {
    **{table: content for table, content in BENCH.items() if table != "pressure"},
    "vapour": {"substance": "water", "mole_fraction": 0.0085},
    "growth": {"temperature_K": 268.9, "pressure_kPa": 70.2},
    "pulse": {"hold_ms": 1.0, "temperature_K": 244.0, "pressure_kPa": 55.0},
    "analysis": {"max_radius_um": 1.6},
}


def with_width(mapping, width):
    """Return a bench with an inner width [mm]."""
    mapping = copy.deepcopy(mapping)
    mapping["chamber"]["width_mm"] = width
    return apparatus_from_mapping(mapping)


# Formulas.


def test_diffusivity_against_a_table():
    """Argon, nitrogen and helium at 300 K and 1 atm: 20, 22 and 180 mm2/s.

    Common tables of heat transfer (Incropera and DeWitt, appendix A.4, from memory): nitrogen
    22.1, helium 180 mm2/s; argon from its K, rho and cp, 0.0177 / (1.62 * 521).
    """
    for name, expected in (("nitrogen", 22.1e-6), ("helium", 180e-6), ("argon", 21.0e-6)):
        gas = matter.carrier(name)
        found = thermal_diffusivity(
            float(gas.conductivity(300.0)), float(gas.heat_capacity(300.0)), 300.0, 101325.0)
        assert found == pytest.approx(expected, rel=0.03), name


@pytest.mark.parametrize(("argument", "value"), [(0.5, 0.479500), (1.0, 0.157299), (2.0, 0.004678)])
def test_a_far_wall_gives_the_tabulated_error_function(argument, value):
    """Half a space: erfc of Carslaw and Jaeger, appendix II (values from memory)."""
    # Two walls, each seen alone as long as the other's reflections have not come.
    width = 1.0
    age = (width / (4.0 * argument)) ** 2
    alone = 0.5 * (centre_warming(1.0, width, age) + 2.0 * math.erfc(3.0 * argument)
                   - 2.0 * math.erfc(5.0 * argument))
    assert alone == pytest.approx(value, abs=1.1e-5)


@pytest.mark.parametrize("fourier", [0.02, 0.05, 0.2, 1.0])
def test_the_middle_of_a_slab_against_its_other_series(fourier):
    """Carslaw and Jaeger 3.3 (8): 1 - (4/pi) sum (-1)^n/(2n+1) exp(-(2n+1)^2 pi^2 a t/w^2)."""
    n = np.arange(200)
    terms = (-1.0) ** n / (2 * n + 1) * np.exp(-((2 * n + 1) * np.pi) ** 2 * fourier)
    assert centre_warming(1.0, 1.0, fourier) == pytest.approx(1 - 4 / np.pi * terms.sum(), abs=1e-9)


def test_layer_is_the_slope_and_warming_the_integral_of_the_profile():
    diffusivity, age = 2.5e-5, 0.08

    def profile(y):
        return math.erfc(y / (2 * math.sqrt(diffusivity * age)))

    slope = (profile(0.0) - profile(1e-9)) / 1e-9
    assert layer_thickness(diffusivity, age) == pytest.approx(1 / slope, rel=1e-5)
    # Little wall for much volume: the core gains (gamma - 1) A/V times the integral.
    whole = quad(profile, 0.0, 0.05)[0]
    assert core_part(diffusivity, 1.4, 0.01, age) == pytest.approx(0.4 * 0.01 * whole, rel=1e-4)


def test_a_core_in_a_narrow_chamber_ends_at_the_walls_temperature():
    assert core_part(2.5e-5, 5 / 3, 1e3, 1.0) == pytest.approx(1.0, abs=0.2)
    parts = [core_part(2.5e-5, 5 / 3, 40.0, age) for age in (0.01, 0.1, 1.0, 10.0)]
    assert parts == sorted(parts)
    assert 0 < parts[0] < parts[-1] < 1


def test_lifetime_is_when_the_middle_has_warmed_by_a_percent():
    life = adiabatic_lifetime(2.1e-5, 0.04)
    assert centre_warming(2.1e-5, 0.04, life) == pytest.approx(0.01, rel=1e-6)
    assert life == pytest.approx(0.04**2 / 2.1e-5 / 63.0, rel=2e-3)
    assert 2 * layer_thickness(2.1e-5, life) / 0.04 == pytest.approx(0.45, abs=0.005)
    # Four times as long in twice the width, and half as long at half the pressure.
    assert adiabatic_lifetime(2.1e-5, 0.08) == pytest.approx(4 * life)
    assert adiabatic_lifetime(4.2e-5, 0.04) == pytest.approx(life / 2)


# Against conduction between two walls, solved by lines.


def conducted(gas, width, state, walls, age, cells=400):
    """Return temperatures [K] and pressure [Pa] of a gas at rest between two walls after a time.

    A closed slab, its half in cells of equal mass from the wall to the middle, at even pressure:
    cp dT/dt = R T d(ln p)/dt + d/dm (rho K dT/dm), the volume of all cells constant. The
    conductivity is that of the local temperature. Independent of the formulas under test.
    """
    temperature, pressure = state
    capacity = float(gas.heat_capacity(temperature))
    amount = pressure * width / 2 / (GAS_CONSTANT * temperature) / cells  # mol/m2 a cell

    def flows(warmth, squeezed):
        # Through cell faces: the wall's at half a cell's distance, none in the middle.
        beside = np.concatenate([[walls], warmth])
        middle = 0.5 * (beside[1:] + beside[:-1])
        density = squeezed / (GAS_CONSTANT * middle)
        apart = np.full(cells, amount)
        apart[0] = amount / 2
        flux = gas.conductivity(middle) * density * (beside[:-1] - beside[1:]) / apart
        return np.diff(np.append(flux, 0.0)) * -1.0 / amount

    def rate(_, warmth):
        squeezed = amount * GAS_CONSTANT * warmth.sum() / (width / 2)
        heated = flows(warmth, squeezed)
        # Volume constant: sum(T) R / p is, so d ln p = sum(dT) / sum(T); solve for d ln p.
        rise = heated.sum() / capacity / (warmth.sum() * (1 - GAS_CONSTANT / capacity))
        return heated / capacity + GAS_CONSTANT * warmth / capacity * rise

    start = np.full(cells, temperature)
    solved = solve_ivp(rate, (0.0, age), start, method="LSODA", rtol=1e-7, atol=1e-6,
                       lband=1, uband=1)
    warmth = solved.y[:, -1]
    return warmth, amount * GAS_CONSTANT * warmth.sum() / (width / 2)


@pytest.mark.parametrize(("name", "width", "age"), [
    ("argon", 0.05, 0.1), ("nitrogen", 0.03, 0.3), ("helium", 0.08, 0.05)])
@pytest.mark.parametrize(("walls", "close"), [(268.5, 5e-3), (295.0, 0.02)])
def test_a_closed_slab_of_real_gas_against_conduction_by_lines(name, width, age, walls, close):
    """To half a percent for a small excess, to two percent with properties that change."""
    gas = matter.carrier(name)
    temperature, pressure = 268.0, 7e4
    capacity = float(gas.heat_capacity(temperature))
    diffusivity = thermal_diffusivity(
        float(gas.conductivity(temperature)), capacity, temperature, pressure)
    heat = WallHeat(diffusivity, walls / temperature - 1, capacity / (capacity - GAS_CONSTANT),
                    temperature, width)
    warmth, squeezed = conducted(gas, width, (temperature, pressure), walls, age)
    assert squeezed / pressure - 1 == pytest.approx(heat.compression(age), rel=close)
    assert warmth[-1] - temperature == pytest.approx(heat.core_warming(age), rel=close)
    # Half the profile's height lies where erfc is a half, at 0.954 sqrt(alpha t), a little more
    # where the core warms meanwhile.
    place = (np.arange(warmth.size) + 0.5) / warmth.size * width / 2
    half = np.interp(-(walls + warmth[-1]) / 2, -warmth, place)
    assert half == pytest.approx(0.9539 * math.sqrt(diffusivity * age), rel=0.03)


def test_conduction_alone_reaches_the_middle_as_said():
    """The middle between walls long after: what compression gave it and what conduction adds."""
    gas = matter.carrier("argon")
    temperature, pressure, walls, width = 290.0, 7e4, 291.0, 0.02
    diffusivity = thermal_diffusivity(
        float(gas.conductivity(temperature)), float(gas.heat_capacity(temperature)),
        temperature, pressure)
    for fourier in (0.016, 0.05):
        age = fourier * width**2 / diffusivity
        warmth, squeezed = conducted(gas, width, (temperature, pressure), walls, age)
        compressed = temperature * (squeezed / pressure) ** (
            GAS_CONSTANT / float(gas.heat_capacity(temperature)))
        expected = centre_warming(diffusivity, width, age) * (walls - temperature)
        # The walls' excess shrinks as the core warms: for both by up to a quarter here.
        assert 0.65 * expected < warmth[-1] - compressed < 1.02 * expected


# What a result and `check` say.


def codes(result):
    """Return the codes of a result's reasons."""
    return {reason.code for reason in result.reasons}


def text_of(result, code):
    """Return the text of a reason."""
    return next(reason.text for reason in result.reasons if reason.code == code)


@pytest.fixture(scope="module")
def narrow(store):
    """Return a simulated pulse of the plain bench, 0.1 s long."""
    mapping = {**copy.deepcopy(BENCH), "analysis": {"max_radius_um": 1.6}}
    return mapping, simulate(apparatus_from_mapping(mapping), store=store, rate=5e3, seed=3)[0]


@pytest.mark.parametrize(("width", "warned"), [(20.0, True), (200.0, False)])
def test_a_layer_that_is_not_thin_is_a_reason(narrow, store, width, warned):
    mapping, pulse = narrow
    result = measure(with_width(mapping, width), pulse.time, pulse.columns, store=store)
    assert ("warm-walls" in codes(result)) == warned
    assert result.verdict == "accepted"
    if warned:
        assert "2.7 mm thick" in text_of(result, "warm-walls")


def test_nothing_is_said_where_no_width_is_stated(narrow, store):
    mapping, pulse = narrow
    result = measure(apparatus_from_mapping(mapping), pulse.time, pulse.columns, store=store)
    assert not codes(result) & {"warm-walls", "pressure-recovers"}


TIME = np.arange(-5e-3, 0.1, 2e-4)


def recovering(rise, width=None):
    """Return a setup whose pressure rises as the root of time after the hold."""
    bench = with_width(BENCH, width) if width else apparatus_from_mapping(BENCH)
    later = np.maximum(TIME - 9.2e-3, 0.0)
    flat = pressure_profile(TIME, (9e4, 55e3, 70e3), 1e-3)
    return growth_setup(bench, TIME, flat * (1 + rise * np.sqrt(later / 0.09)))


@pytest.mark.parametrize(("rise", "width", "warned"), [
    (0.01, None, True), (0.03, 200.0, True), (0.01, 60.0, False), (0.0015, None, False),
    (-0.03, None, False)])
def test_a_pressure_that_recovers_is_a_reason(rise, width, warned):
    """Between a cube's walls 60 mm apart a percent is what conduction gives."""
    found = heat_findings(recovering(rise, width), 0.1)
    assert ("pressure-recovers" in {one.code for one in found}) == warned


def test_heat_of_condensation_explains_a_rise():
    """Thick clouds warm their gas: cv dT = L dq at constant volume, by hand for a grown cloud."""
    setup = recovering(0.012)
    thick = grow(setup, Cloud(number=math.log(4e11)))
    assert heat_findings(setup, 0.1, grow(setup, Cloud(number=math.log(1e8))))
    assert not heat_findings(setup, 0.1, thick)
    settled = 0.1 * 0.1 + 0.9 * setup.births.times[-1]
    gone = thick.condensed[0][-1] - np.interp(settled, thick.time, thick.condensed[0])
    latent, heat = 45.0e3, 20.9 - GAS_CONSTANT  # water at 270 K; argon with one percent of it
    assert 1.5 * gone * latent / (heat * 270.0) > 0.012 - 2e-3


def test_a_stated_growth_that_walls_would_warm_is_a_reason(store):
    bench = apparatus_from_mapping(STATED)
    pulse = simulate(bench, store=store, rate=5e3, seed=3)[0]
    result = measure(with_width(STATED, 60.0), pulse.time, pulse.columns, store=store)
    assert "warms the core by 1 K or more" in text_of(result, "warm-walls")
    sure = copy.deepcopy(STATED)
    sure["growth"]["temperature_K_sigma"] = 2.0
    again = measure(with_width(sure, 60.0), pulse.time, pulse.columns, store=store)
    assert "warm-walls" not in codes(again)


def test_check_shows_how_long_the_gas_is_adiabatic(tmp_path):
    setup = growth_setup(with_width(STATED, 60.0))
    heat = wall_heat(setup)
    assert heat.excess == pytest.approx(297.0 / 268.9 - 1)
    path = tmp_path / "bench.toml"
    path.write_text("""
[beam]
wavelength_nm = 532.0
polarization = "perpendicular"
[[detector]]
column = "scatter_V"
angle_deg = 30.0
half_angle_deg = 2.0
[vapour]
substance = "water"
mole_fraction = 0.0085
[gas]
carrier = "argon"
[chamber]
temperature_K = 297.0
pressure_kPa = 90.0
width_mm = 60.0
[growth]
temperature_K = 268.9
pressure_kPa = 70.2
[analysis]
max_radius_um = 1.0
""", encoding="utf-8")
    text = check_text(path)
    life = adiabatic_lifetime(heat.diffusivity, 0.06)
    assert f"adiabatic lifetime          {life:.2g} s in the middle of 60 mm" in text
    assert "warm layer at the walls     2.8 mm after 101 ms" in text
    path.write_text(path.read_text(encoding="utf-8").replace("width_mm = 60.0", ""),
                    encoding="utf-8")
    assert "state chamber.width_mm" in check_text(path)
