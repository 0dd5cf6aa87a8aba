"""What a background takes between birth and detection, and how rates are corrected for it."""

import math

import numpy as np
import pytest
from scipy.integrate import solve_ivp

from scatterfit.matter import carrier, substance
from scatterfit.nucleation.background import MODEL_SIGMA, background_losses
from scatterfit.nucleation.isotherm import RateSettings
from scatterfit.nucleation.losses import (
    Background,
    Surroundings,
    coagulation_coefficient,
    condensation_sink,
    critical_diameter,
    growth_rate,
    loss_exponent,
    particle_diffusivity,
    vapour_taken,
)
from scatterfit.nucleation.rates import analyse_rates
from scatterfit.nucleation.rates_result import rates_to_dict
from scatterfit.nucleation.select import rate_pulses
from scatterfit.nucleation.table import table_from_columns
from scatterfit.nucleation.theory import reference_theory

WATER = substance("water")
T, S, J = "nucleation_temperature_K", "nucleation_saturation_ratio", "nucleation_rate_per_cm3_s"
PULSES = 20


AIR = Surroundings(298.15, 101325.0, 1.5, WATER, carrier("air"))


@pytest.mark.parametrize(("diameter", "printed"), [(10e-9, 5.23e-8), (100e-9, 6.82e-10),
                                                   (1e-6, 2.74e-11)])
def test_diffusion_of_particles(diameter, printed):
    # Seinfeld and Pandis 2006, table 9.5 (air at 20 degrees Celsius); cited from memory.
    cold = Surroundings(293.15, 101325.0, 1.0, WATER, carrier("air"))
    assert float(particle_diffusivity(cold, [diameter])[0]) == pytest.approx(printed, rel=0.03)


def test_coagulation_has_the_limits_of_theory():
    # Continuum: 8 k T / 3 mu for equal sizes; free molecules: (d1 + d2)^2 / 4 times the mean
    # relative speed times pi.
    size = 50e-6
    slow = 8 * 1.380649e-23 * 298.15 / (3 * float(AIR.gas.viscosity(298.15)))
    found = float(coagulation_coefficient(AIR, [size], [size], 1000.0)[0])
    assert found == pytest.approx(slow, rel=0.01)
    size = 0.5e-9
    mass = 1000.0 * math.pi / 6 * size**3
    fast = math.pi * size**2 * math.sqrt(16 * 1.380649e-23 * 298.15 / (math.pi * mass))
    found = float(coagulation_coefficient(AIR, [size], [size], 1000.0)[0])
    assert found == pytest.approx(fast, rel=0.02)


def test_condensation_sink_of_small_particles_is_that_of_free_molecules():
    background = Background(1e10, 2e-9)
    speed = math.sqrt(8 * 8.314462618 * 298.15 / (math.pi * WATER.molar_mass))
    area = math.pi * background.diameter**2
    expected = 0.25 * speed * area * background.concentration
    assert condensation_sink(AIR, background) == pytest.approx(expected, rel=0.02)


def test_coagulation_against_a_printed_table():
    # Seinfeld and Pandis 2006, table 13.3 (air, 298 K, 1 atm, 1 g/cm3; Fuchs' form) in m3/s; cited
    # from memory. Dahneke's form differs from Fuchs' by a few percent.
    printed = {(2, 2): 8.9e-16, (2, 10): 5.7e-15, (10, 10): 19e-16, (2, 100): 3.4e-13,
               (100, 100): 15e-16, (100, 1000): 5.0e-15, (1000, 1000): 6.9e-16}
    for (small, large), expected in printed.items():
        found = float(coagulation_coefficient(AIR, [small * 1e-9], [large * 1e-9], 1000.0)[0])
        assert found == pytest.approx(expected, rel=0.08), (small, large)


COLD = Surroundings(240.0, 60e3, 12.0, WATER, carrier("argon"))


def test_losses_of_droplets_are_those_of_a_slow_integration_in_time():
    # One droplet size after the other with scipy: dd/dt and d ln N/dt together, from birth at 1.05
    # critical sizes until the size of detection.
    background = Background(1e13, 200e-9)

    def rates(_, state):
        met = coagulation_coefficient(COLD, [state[0]], [200e-9], WATER.density(240.0))[0]
        return [float(growth_rate(COLD, [state[0]])[0]), float(-met * 1e13)]

    def detected(_, state):
        return state[0] - 200e-9

    detected.terminal = True
    birth = [1.05 * float(critical_diameter(COLD)), 0.0]
    slow = solve_ivp(rates, (0.0, 1.0), birth, events=detected, rtol=1e-8, atol=1e-16)
    assert float(loss_exponent(COLD, background)[0]) == pytest.approx(-slow.y[1, -1], rel=1e-4)


def test_losses_against_a_closed_form(monkeypatch):
    # Lehtinen et al. (J. Aerosol Sci. 38 (2007) 988, eqs. 5 to 7): for a loss that goes as d^m and
    # a constant growth rate, ln P = -CoagS(d1) d1 / GR ((d2 / d1)^(m + 1) - 1) / (m + 1). Well
    # above the critical size growth is nearly constant.
    first, last = 6e-9, 12e-9
    monkeypatch.setattr("scatterfit.nucleation.losses._FIRST",
                        first / float(critical_diameter(COLD)))
    met = coagulation_coefficient(COLD, [first, last], 1e-7, WATER.density(240.0))
    power = math.log(met[1] / met[0]) / math.log(last / first)
    assert -2.0 < power < -1.5
    shape = ((last / first) ** (power + 1) - 1) / (power + 1)
    growth = float(growth_rate(COLD, [math.sqrt(first * last)])[0])
    found = float(loss_exponent(COLD, Background(1e13, 1e-7, last))[0])
    assert found == pytest.approx(1e13 * met[0] * first / growth * shape, rel=0.02)


def test_the_model_sigma_of_losses_is_what_the_place_of_birth_changes(monkeypatch):
    background = Background(1e12, 200e-9)
    usual = float(loss_exponent(COLD, background)[0])
    for first, sign in ((1.02, 1), (1.2, -1)):
        monkeypatch.setattr("scatterfit.nucleation.losses._FIRST", first)
        change = float(loss_exponent(COLD, background)[0]) / usual - 1
        assert sign * change == pytest.approx(MODEL_SIGMA, abs=0.08)


def test_growth_vanishes_at_the_critical_size():
    critical = float(critical_diameter(COLD))
    length = 4 * float(WATER.surface_tension(240.0)) * WATER.molar_mass
    assert critical == pytest.approx(
        length / (float(WATER.density(240.0)) * 8.314462618 * 240.0 * math.log(12.0)))
    below, above = growth_rate(COLD, [0.99 * critical, 1.01 * critical])
    assert below < 0 < above


def test_vapour_taken_against_a_slow_integration():
    # The particles' own growth with scipy; the vapour is that in their volume.
    background, duration = Background(1e11, 100e-9), 1e-3
    grown = solve_ivp(lambda _, d: growth_rate(COLD, d), (0, duration), [100e-9], rtol=1e-8,
                      t_eval=[0.5 * duration * 1.125, duration * 0.9375], atol=1e-15).y[0]
    liquid = math.pi / 6 * (grown**3 - 100e-9**3) * 1e11 * float(WATER.density(240.0))
    gas = 12 * float(WATER.saturation_pressure(240.0)) / (8.314462618 * 240.0) * WATER.molar_mass
    found = vapour_taken(COLD, background, duration)[0, [4, 7]]
    assert found == pytest.approx(liquid / gas, rel=0.01)
    # In the first moments, before they have grown, it is the condensation sink over the time; the
    # sink knows neither curvature nor warmth, by which droplets of 1 um grow a quarter slower.
    short, large = 1e-6, Background(1e11, 1e-6)
    first = float(vapour_taken(COLD, large, short)[0, 7])
    sink = float(condensation_sink(COLD, large)) * 0.9375 * short
    assert 0.6 * sink < first < 0.9 * sink


def background_cells(number):
    ratio = np.linspace(10.5, 11.5, PULSES)
    scatter = 0.05 * np.random.default_rng(22).standard_normal(PULSES)
    return {T: np.full(PULSES, 245.0), S: ratio, J: 1e7 * (ratio / 11.0) ** 32 * np.exp(scatter),
            "nucleation_pressure_kPa": np.full(PULSES, 60.0),
            "background_concentration_per_cm3": np.full(PULSES, number),
            "nucleation_effective_ms": np.ones(PULSES),
            "background_diameter_nm": np.full(PULSES, 200.0)}


def with_background(cells, **choices):
    settings = RateSettings(WATER, gas=carrier("argon"), **choices)
    (isotherm,) = rates_to_dict(analyse_rates(table_from_columns(cells), settings))["isotherms"]
    return isotherm


def test_rates_are_corrected_for_a_background():
    cells = background_cells(1e5)
    found, quoted = with_background(cells), with_background(cells, put_back=False)
    clean = with_background(background_cells(0.0))
    lost = found["losses"]
    assert lost["corrected"]
    assert not quoted["losses"]["corrected"]
    assert clean["losses"] is None
    factor = lost["factor_on_rate"]["value"]
    assert factor == pytest.approx(1 / (1 - lost["lost_percent"]["value"] / 100))
    assert 1.02 < factor < 1.5
    middle = [math.log10(one["rate_range_per_cm3_s"][1]) for one in (found, quoted, clean)]
    assert middle[1] == middle[2]
    assert middle[0] - middle[2] == pytest.approx(math.log10(factor), abs=0.02)
    # What is put back is uncertain, by the same factor for all pulses: it moves S at a given J.
    shared = [one["saturation_ratio_at"][0]["saturation_ratio"]["sigma_systematic"] /
              one["saturation_ratio_at"][0]["saturation_ratio"]["value"] for one in (found, clean)]
    assert shared[1] == 0.0
    expected = lost["factor_on_rate"]["sigma"] / factor / found["slope"]["value"]
    assert shared[0] == pytest.approx(expected, rel=0.05)
    assert {one["code"] for one in found["reasons"]} == {"losses"}


def test_losses_by_a_slow_sum_over_the_hold():
    # J from theory at every microsecond of a hold in which the particles take vapour and warm the
    # gas, against the same without them.
    cells = {name: values[:1] for name, values in background_cells(2e4).items()}
    kelvin, ratio = float(cells[T][0]), float(cells[S][0])
    table = table_from_columns(cells)
    settings = RateSettings(WATER, gas=carrier("argon"))
    lost, _ = background_losses(table, rate_pulses(table)[0], settings)
    state = Surroundings(kelvin, 60e3, ratio, WATER, carrier("argon"))
    time = np.linspace(0, 1e-3, 1001)
    grown = solve_ivp(lambda _, d: growth_rate(state, d), (0, 1e-3), [200e-9], t_eval=time).y[0]
    vapour = ratio * float(WATER.saturation_pressure(kelvin)) / (8.314462618 * kelvin)
    liquid = (math.pi / 6 * (grown**3 - 200e-9**3) * 2e10 * float(WATER.density(kelvin))
              / WATER.molar_mass)
    warmth = liquid * float(WATER.latent_heat(kelvin)) / (60e3 / (8.314462618 * kelvin) * 20.8)
    warm = kelvin + warmth
    left = ratio * (1 - liquid / vapour) * (WATER.saturation_pressure(kelvin)
                                            / WATER.saturation_pressure(warm))
    theory = reference_theory(WATER)
    rates = np.exp(theory.log_rate(warm, left) - theory.log_rate(kelvin, ratio))
    assert lost.vapour[0] == pytest.approx(-math.log(np.trapezoid(rates, time) / 1e-3), rel=0.03)


def test_a_background_is_taken_to_the_density_of_the_hold():
    # Argon is monatomic: n / n0 = (T / T0)^1.5; or by the two pressures.
    cells = background_cells(1e5)
    as_given = with_background(cells)["losses"]
    cells["chamber.temperature_K"] = np.full(PULSES, 296.15)
    thinner = with_background(cells)["losses"]
    thin = (cells[T][0] / 296.15) ** 1.5
    sinks = [one["condensation_sink_per_s"] for one in (thinner, as_given)]
    assert sinks[0] / sinks[1] == pytest.approx(thin, rel=0.02)
    cells["start_pressure_kPa"] = np.full(PULSES, 100.0)
    by_pressure = with_background(cells)["losses"]
    assert by_pressure["condensation_sink_per_s"] / sinks[1] == pytest.approx(
        60.0 * 296.15 / (100.0 * cells[T][0]), rel=0.02)
    assert "by temperature and pressure" in by_pressure["density"]


def test_sigmas_of_a_background_enter():
    cells = background_cells(1e5)
    bare = with_background(cells)["losses"]
    cells["background_concentration_per_cm3_sigma"] = np.full(PULSES, 5e4)
    wide = with_background(cells)["losses"]
    log_factor = math.log(bare["factor_on_rate"]["value"])
    parts = [one["factor_on_rate"]["sigma"] / one["factor_on_rate"]["value"]
             for one in (bare, wide)]
    assert parts[1] == pytest.approx(math.hypot(parts[0], 0.5 * log_factor), rel=1e-3)


@pytest.mark.parametrize(("drop", "code"), [("nucleation_pressure_kPa", "losses-unknown"),
                                            ("nucleation_effective_ms", "losses-unknown"),
                                            (None, "vapour-taken")])
def test_what_is_not_known_of_losses_is_said(drop, code):
    cells = background_cells(1e7)
    cells.pop(drop, None)
    found = with_background(cells)
    assert code in {reason["code"] for reason in found["reasons"]}
    assert (found["losses"] is None) == (drop == "nucleation_pressure_kPa")
