"""Seeds: Kelvin, Koehler and Fletcher against print; onset and width cover the truth."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, special

from scatterfit.errors import InvalidInputError
from scatterfit.matter import carrier, substance
from scatterfit.nucleation.activation import ActivationSettings, analyse_activation
from scatterfit.nucleation.activation_fit import Fractions, fit_curve, normal_part, wilson_interval
from scatterfit.nucleation.activation_result import activation_to_dict, with_comparison
from scatterfit.nucleation.table import table_from_columns
from scatterfit.nucleation.theory import liquid_of
from scatterfit.nucleation.threshold import (
    contact_angle,
    equivalent_diameter,
    fletcher_factor,
    kappa_for,
    kelvin_length,
    koehler_maximum,
)

WATER = substance("water")
SETTINGS = ActivationSettings(WATER)
T, S = "nucleation_temperature_K", "nucleation_saturation_ratio"
NUMBER, SEEDS = "concentration_per_cm3", "seed_concentration_per_cm3"
ONSET, WIDTH, PULSES, REPEATS = 1.2, 0.02, 30, 200


def analysed(cells, settings=SETTINGS, **how):
    return analyse_activation(table_from_columns(cells), settings, **how)


# --- thresholds ----------------------------------------------------------------------------------


@pytest.mark.published
@pytest.mark.parametrize(("radius", "printed"), [(0.01e-6, 1.12), (1e-6, 1.0012)])
def test_kelvin_of_the_textbook(radius, printed):
    # Wallace and Hobbs, Atmospheric Science, 2nd ed. 2006, section 6.1.1: water at 5 C.
    length = float(kelvin_length(278.15, liquid_of(WATER, 278.15)))
    tolerance = 0.5 * 10.0 ** -len(str(printed).partition(".")[2])
    assert math.exp(length / (2 * radius)) == pytest.approx(printed, abs=1.05 * tolerance)


@pytest.mark.parametrize(("kelvin", "ratios"), [
    (263.15, (3.5632, 1.13549, 1.01279, 1.00127)), (273.15, (3.3212, 1.12753, 1.01208, 1.00120)),
    (293.15, (2.9363, 1.11373, 1.01083, 1.00108)), (298.15, (2.8553, 1.11062, 1.01055, 1.00105)),
])
def test_kelvin_with_the_water_of_iapws(kelvin, ratios):
    # Worked out apart from scatterfit with IAPWS R1-76 and G12-15, at radii of 1, 10, 100, 1000 nm.
    liquid = liquid_of(WATER, kelvin)
    for radius, ratio in zip((1e-9, 1e-8, 1e-7, 1e-6), ratios, strict=True):
        found = math.exp(float(kelvin_length(kelvin, liquid)) / (2 * radius))
        assert found - 1 == pytest.approx(ratio - 1, rel=2e-3, abs=6e-6)
        assert float(equivalent_diameter(found, kelvin, liquid)) == pytest.approx(2 * radius)


def ideal_salt(kelvin):
    """Return the hygroscopicity of sodium chloride as an ideal solution of two ions."""
    return 2 * 2165.0 / 0.05844 * WATER.molar_mass / float(WATER.density(kelvin))


@pytest.mark.published
def test_koehler_of_the_textbook():
    # Seinfeld and Pandis 2006, chapter 17: sodium chloride of 0.1 um, about 0.13 percent as read
    # off a figure; the chapter's own formula for ideal solutions gives 0.113 (worked out apart).
    length = float(kelvin_length(293.0, liquid_of(WATER, 293.0)))
    ratio, _ = koehler_maximum(0.1e-6, ideal_salt(293.0), length)
    assert 100 * (ratio - 1) == pytest.approx(0.12, abs=0.02)


@pytest.mark.published
@pytest.mark.parametrize(("grams", "micrometres", "percent"), [
    (1e-16, 0.19, 0.42), (1e-15, 0.61, 0.13), (1e-14, 1.9, 0.042), (1e-13, 6.1, 0.013),
    (1e-12, 19, 0.0042),
])
def test_koehler_of_rogers_and_yau(grams, micrometres, percent):
    # Rogers and Yau 1989, table 6.2, sodium chloride at 273 K; cited from memory.
    length = float(kelvin_length(273.15, liquid_of(WATER, 273.15)))
    dry = (6 * grams * 1e-3 / (math.pi * 2165.0)) ** (1 / 3)
    ratio, droplet = koehler_maximum(dry, ideal_salt(273.15), length)
    assert 0.5e6 * droplet == pytest.approx(micrometres, rel=0.04)
    assert 100 * (ratio - 1) == pytest.approx(percent, rel=0.04)


@given(diameter=st.floats(2e-9, 1e-6), kappa=st.floats(1e-4, 2.0))
def test_koehler_maximum_is_one(diameter, kappa):
    length = 2.2e-9
    ratio, droplet = koehler_maximum(diameter, kappa, length)

    def curve(size):
        growth = size**3 - diameter**3
        return growth / (growth + kappa * diameter**3) * math.exp(length / size)

    assert ratio == pytest.approx(curve(droplet), rel=1e-9)
    for factor in (0.999, 1.001):
        if droplet * factor > diameter:
            assert curve(droplet * factor) <= ratio * (1 + 1e-12)
    assert 1 < ratio <= math.exp(length / diameter)


@pytest.mark.parametrize("kappa", [0.01, 0.3, 1.28])
def test_hygroscopicity_comes_back(kappa):
    ratio, _ = koehler_maximum(50e-9, kappa, 2.2e-9)
    assert kappa_for(50e-9, ratio, 2.2e-9) == pytest.approx(kappa, rel=1e-4)
    assert kappa_for(50e-9, math.exp(2.2 / 50) * 1.001, 2.2e-9) is None


FLETCHER = {  # Fletcher's formula worked out apart from scatterfit, where it keeps its digits
    0.0: (0.993444, 0.904508, 0.792893, 0.673762, 0.574022, 0.537376, 0.503750),
    0.5: (0.984779, 0.762260, 0.500000, 0.303848, 0.205115, 0.178975, 0.158375),
    0.8: (0.977636, 0.626869, 0.236754, 0.077570, 0.040585, 0.033504, 0.028492),
    0.9: (0.974908, 0.568514, 0.127639, 0.023639, 0.010900, 0.008810, 0.007387),
}


@pytest.mark.parametrize("cosine", sorted(FLETCHER))
def test_fletcher_at_finite_sizes(cosine):
    sizes = [0.1, 0.5, 1, 2, 5, 10, 100]
    assert fletcher_factor(cosine, sizes) == pytest.approx(FLETCHER[cosine], abs=1e-6)


@pytest.mark.published
@pytest.mark.parametrize(("cosine", "flat"), [(-1, 1.0), (0, 0.5), (0.5, 0.15625), (0.8, 0.028),
                                              (0.9, 0.00725), (0.95, 0.00184375), (1, 0.0)])
def test_fletcher_on_a_flat_surface(cosine, flat):
    # Volmer's (2 + m)(1 - m)^2 / 4, exact; from 1e4 on the formula as printed loses digits.
    for size in (1e6, 1e8, 1e12, math.inf):
        assert float(fletcher_factor(cosine, size)) == pytest.approx(flat, rel=2e-6, abs=1e-12)
    joint = fletcher_factor(cosine, [0.99e4, 1.01e4])
    assert abs(joint[1] - joint[0]) <= 1e-5


@given(cosine=st.floats(-1, 1), size=st.floats(0, 1e9))
def test_fletcher_is_a_part_and_falls_with_wetting(cosine, size):
    factor = float(fletcher_factor(cosine, size))
    assert 0 <= factor <= 1
    assert float(fletcher_factor(max(cosine - 0.1, -1), size)) >= factor - 1e-9


def test_fletcher_refuses_what_is_no_cosine():
    with pytest.raises(InvalidInputError, match="cosine"):
        fletcher_factor(1.1, 1.0)


def test_contact_angle_gives_one_activation_in_two():
    liquid, ratio, size, time = liquid_of(WATER, 265.0), 1.6, 60e-9, 1e-3
    angle, factor = contact_angle(ratio, size, time, 265.0, liquid)
    length = float(kelvin_length(265.0, liquid))
    cluster = length / (2 * math.log(ratio))
    barrier = 4 * math.pi * cluster**2 * float(liquid[0]) / (3 * 1.380649e-23 * 265.0)
    assert float(fletcher_factor(math.cos(angle), 0.5 * size / cluster)) == pytest.approx(factor)
    expected = math.pi * size**2 * 1e29 * time * math.exp(-factor * barrier)
    assert expected == pytest.approx(math.log(2), rel=1e-6)
    assert contact_angle(1.02, size, time, 265.0, liquid) == (None, None)


# --- counting ------------------------------------------------------------------------------------


@pytest.mark.published
@pytest.mark.parametrize(("hits", "trials", "low", "high"), [
    (0, 20, 0.0, 0.1611), (1, 29, 0.0061, 0.1718), (15, 148, 0.0624, 0.1605),
    (81, 263, 0.2553, 0.3662),
])
def test_score_intervals_of_newcombe(hits, trials, low, high):
    # R. G. Newcombe, Statistics in Medicine 17 (1998) 857, table I, method 3; from memory.
    found = wilson_interval([hits / trials], [trials], 0.95)
    assert [float(end[0]) for end in found] == pytest.approx([low, high], abs=1e-4)


def test_normal_part_against_scipy():
    z = np.linspace(-30, 30, 601)
    assert normal_part(z) == pytest.approx(special.ndtr(z), rel=1e-12)


def seeded(random, kind, *, seeds=1000, plateau=1.0):
    """Return S and droplets of one run under a law of scatter."""
    x = math.log(ONSET) + random.uniform(-0.08, 0.08, PULSES)
    part = plateau * special.ndtr((x - math.log(ONSET)) / WIDTH)
    number = {"binomial": lambda: random.binomial(seeds, part),
              "poisson": lambda: random.poisson(seeds * part),
              "proportional": lambda: seeds * part * (1 + 0.03 * random.normal(size=PULSES)),
              "both": lambda: random.poisson(seeds * part * random.normal(1, 0.05, PULSES)),
              }[kind]()
    return {T: np.full(PULSES, 265.0), S: np.exp(x), NUMBER: number.astype(float),
            SEEDS: np.full(PULSES, float(seeds))}


def assert_coverage(truth, estimates):
    """Three binomial standard deviations either side of what is promised."""
    inside = [abs(one.value - truth) <= one.sigma for one in estimates]
    within = [one.interval[0] <= truth <= one.interval[1] for one in estimates]
    for found, promised in ((inside, 0.6827), (within, 0.95)):
        slack = 3.0 * math.sqrt(promised * (1 - promised) / len(estimates))
        assert abs(np.mean(found) - promised) < slack, np.mean(found)


@pytest.mark.slow
@pytest.mark.parametrize(("kind", "plateau", "counted"), [
    ("binomial", 1.0, False), ("poisson", 1.0, False), ("proportional", 1.0, False),
    ("both", 1.0, False), ("poisson", 0.8, False), ("binomial", 1.0, True),
])
def test_onset_and_width_cover_the_truth(kind, plateau, counted):
    random = np.random.default_rng(31)
    runs = []
    for _ in range(REPEATS):
        cells = seeded(random, kind, plateau=plateau)
        if counted:
            cells["viewed_volume_mm3"] = np.full(PULSES, 1000.0)
        runs += analysed(cells).runs
    assert len(runs) == REPEATS
    assert_coverage(ONSET, [run.onset for run in runs])
    assert_coverage(WIDTH, [run.width for run in runs])


def test_stated_errors_and_those_that_all_pulses_share():
    random = np.random.default_rng(32)
    runs = []
    for _ in range(REPEATS // 2):
        cells = seeded(random, "binomial", seeds=10**6)
        own, shared = 0.02 * cells[SEEDS], 0.05
        scale = 1 + shared * random.normal()
        cells[NUMBER] = np.maximum(cells[NUMBER] * scale + own * random.normal(size=PULSES), 0)
        cells[S] = cells[S] * math.exp(0.004 * random.normal())
        cells |= {f"{NUMBER}_sigma_statistical": own, f"{NUMBER}_sigma_systematic":
                  shared * cells[NUMBER], f"{S}_sigma": 0.004 * cells[S],
                  f"{S}_sigma_systematic": 0.004 * cells[S]}
        runs += analysed(cells).runs
    assert runs[0].onset.systematic == pytest.approx(0.004 * ONSET, rel=0.02)
    inside = [abs(run.onset.value - ONSET) < run.onset.sigma for run in runs]
    assert 0.5 < np.mean(inside) < 0.85


def test_the_fit_of_counts_is_the_one_of_largest_binomial_likelihood():
    random = np.random.default_rng(33)
    x = math.log(ONSET) + random.uniform(-0.05, 0.05, 25)
    hits = random.binomial(40, special.ndtr((x - math.log(ONSET)) / WIDTH))
    data = Fractions(x, hits / 40, np.full(25, 40.0), True, None, np.zeros(25))
    curve = fit_curve(data, free_plateau=False)

    def minus_log_likelihood(free):
        z = (x - free[0]) / math.exp(free[1])
        return -np.sum(hits * special.log_ndtr(z) + (40 - hits) * special.log_ndtr(-z))

    best = optimize.minimize(minus_log_likelihood, [math.log(ONSET), math.log(WIDTH)],
                             method="Nelder-Mead", options={"xatol": 1e-8, "fatol": 1e-10}).x
    sigma = math.sqrt(curve.covariance[0, 0])
    assert abs(curve.centre - best[0]) < 0.1 * sigma
    assert math.log(curve.width) == pytest.approx(best[1], abs=0.03)


def test_an_onset_between_two_pulses_has_no_width():
    cells = {T: [265.0] * 6, S: [1.1, 1.15, 1.19, 1.21, 1.25, 1.3], SEEDS: [1000.0] * 6,
             NUMBER: [0, 0, 0, 1000, 1000, 1000]}
    (run,) = analysed(cells).runs
    assert run.width is None
    assert run.onset.value == pytest.approx(1.2, abs=0.001)
    assert run.onset.sigma == pytest.approx(0.02 / math.sqrt(12), rel=0.05)
    result = activation_to_dict(analysed(cells))["isotherms"][0]
    assert result["width"] is None
    assert [reason["code"] for reason in result["reasons"]] == ["width-unresolved", "no-sigmas"]


def test_without_an_onset_nothing_is_claimed():
    cells = {T: [265.0] * 4, S: [1.1, 1.15, 1.2, 1.25], SEEDS: [1000.0] * 4,
             NUMBER: [0.0, 1.0, 0.0, 2.0]}
    (run,) = activation_to_dict(analysed(cells))["isotherms"]
    assert run["onset"] is run["width"] is run["plateau"] is None
    assert [reason["code"] for reason in run["reasons"]] == ["no-onset"]


def test_a_pulse_without_a_cloud_counts_as_none_activated():
    cells = seeded(np.random.default_rng(34), "poisson")
    dark = cells[NUMBER] < 5
    cells["verdict"] = ["rejected" if one else "accepted" for one in dark]
    cells["upper_limit_per_cm3"] = np.where(dark, 5.0, np.nan)
    cells[NUMBER] = np.where(dark, np.nan, cells[NUMBER])
    (run,) = analysed(cells).runs
    assert len(run.pulses.names) == PULSES
    assert np.sum(run.pulses.data.fraction == 0) == np.sum(dark)
    assert run.onset.value == pytest.approx(ONSET, abs=5 * run.onset.sigma)


# --- runs ----------------------------------------------------------------------------------------


def two_runs(random, **changes):
    first, second = seeded(random, "poisson"), seeded(random, "poisson")
    second = {**second, **{name: np.full(PULSES, value) for name, value in changes.items()}}
    return {name: np.r_[first.get(name, np.full(PULSES, 40.0)), second[name]] for name in second}


def test_seeds_of_two_sizes_are_two_runs():
    found = analysed(two_runs(np.random.default_rng(35), seed_diameter_nm=80.0)).runs
    assert [run.diameter for run in found] == pytest.approx([40e-9, 80e-9])


def test_two_temperatures_are_two_runs_but_a_falling_one_is_one():
    random = np.random.default_rng(36)
    assert len(analysed(two_runs(random, **{T: 285.0})).runs) == 2
    steps = np.repeat(np.linspace(1.1, 1.3, 8), 6)  # deeper and deeper expansions, six of each
    part = special.ndtr((np.log(steps) - math.log(ONSET)) / WIDTH)
    cells = {T: 290 - 100 * (steps - 1.1), S: steps, NUMBER: random.poisson(1000 * part) * 1.0,
             SEEDS: np.full(steps.size, 1000.0)}
    found = analysed(cells)
    assert len(found.runs) == 1
    codes = {reason["code"] for reason in activation_to_dict(found)["isotherms"][0]["reasons"]}
    assert "temperature-spread" in codes


def test_a_table_without_sigmas_says_what_is_missing():
    """Errors that pulses share do not scatter: the shared part of the onset is then unknown."""
    cells = seeded(np.random.default_rng(35), "poisson")
    plain = activation_to_dict(analysed(cells))["isotherms"][0]
    cells[f"{S}_sigma"] = 0.01 * cells[S]
    told = activation_to_dict(analysed(cells))["isotherms"][0]
    assert "no-sigmas" in [reason["code"] for reason in plain["reasons"]]
    assert "no-sigmas" not in [reason["code"] for reason in told["reasons"]]


def test_runs_are_compared():
    random = np.random.default_rng(37)
    cells = two_runs(random, seed_diameter_nm=80.0)
    cells[S] = np.r_[cells[S][:PULSES], 1.05 * cells[S][PULSES:]]
    (pair,) = with_comparison(analysed(cells)).comparison
    assert pair.onset.value == pytest.approx(math.log(1.05), abs=4 * pair.onset.sigma)
    assert pair.onset.sigma < 0.002
    other = with_comparison(analysed(cells), analysed(cells)).comparison
    assert [one.onset.value for one in other] == pytest.approx([0, 0])


def test_number_and_seeds_are_brought_to_one_gas_density():
    cells = seeded(np.random.default_rng(38), "poisson")
    plain = analysed(cells)
    assert "as given" in plain.density
    cells |= {"chamber.temperature_K": np.full(PULSES, 295.0),
              "chamber.pressure_kPa": np.full(PULSES, 100.0),
              "growth_temperature_K": np.full(PULSES, 250.0),
              "growth_pressure_kPa": np.full(PULSES, 100.0 * (250 / 295) ** 2.5)}
    by_pressure = analysed(cells)
    del cells["growth_pressure_kPa"]
    along = analysed(cells, ActivationSettings(WATER, gas=carrier("argon")))
    expected = (295 / 250) ** 1.5  # a monatomic gas: n / n0 = (T / T0)^(5/2 - 1)
    for found in (by_pressure, along):
        factor = found.runs[0].pulses.data.fraction.sum() / plain.runs[0].pulses.data.fraction.sum()
        assert factor == pytest.approx(expected, rel=1e-3)


def test_what_an_onset_means_for_the_seeds():
    cells = seeded(np.random.default_rng(39), "poisson")
    liquid = liquid_of(WATER, 265.0)
    size = float(equivalent_diameter(ONSET, 265.0, liquid))
    cells["seed_diameter_nm"] = np.full(PULSES, 1e9 * size)
    (run,) = analysed(cells).runs
    assert run.kelvin == pytest.approx(ONSET, rel=1e-9)
    assert run.equivalent.value == pytest.approx(size, abs=4 * run.equivalent.sigma)
    larger = {**cells, "seed_diameter_nm": np.full(PULSES, 2e9 * size)}
    (run,) = analysed(larger, ActivationSettings(WATER, kappa=0.5)).runs
    assert run.angle is not None
    assert run.kappa is None
    assert run.koehler < run.kelvin < run.onset.value
    smaller = {**cells, "seed_diameter_nm": np.full(PULSES, 0.5e9 * size)}
    (run,) = analysed(smaller).runs
    assert run.angle is None
    length = float(kelvin_length(265.0, liquid))
    back = koehler_maximum(run.diameter, run.kappa.value, length)[0]
    assert back == pytest.approx(run.onset.value, rel=1e-6)
