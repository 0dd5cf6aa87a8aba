"""Many pulses: theories against print, isotherms, lines with errors, limits, holds."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, special
from water_isotherms import FITTED, SLIP, VIISANEN_STREY_REISS, WOELK_STREY, columns

from scatterfit.constants import AVOGADRO
from scatterfit.droplet_growth.classical_rate import classical_log_rate
from scatterfit.errors import InvalidInputError
from scatterfit.matter import substance
from scatterfit.nucleation.censored import Limits, log_chance_of_nothing, with_limits
from scatterfit.nucleation.comparison import compare
from scatterfit.nucleation.grouping import isotherms, natural_groups
from scatterfit.nucleation.isotherm import RateSettings
from scatterfit.nucleation.line import Points, fit_line, outliers, robust_line
from scatterfit.nucleation.quantiles import chi_square_quantile, student_quantile
from scatterfit.nucleation.rates import analyse_rates
from scatterfit.nucleation.rates_result import rates_to_dict
from scatterfit.nucleation.table import table_from_columns
from scatterfit.nucleation.theory import (
    critical_molecules,
    liquid_of,
    log_rate_slope,
    reference_theory,
    theories,
    woelk_strey_liquid,
)

WATER = substance("water")
BY_NAME = {theory.name: theory for theory in theories(WATER)}
SETTINGS = RateSettings(WATER)
T, S, J = "nucleation_temperature_K", "nucleation_saturation_ratio", "nucleation_rate_per_cm3_s"
ONE_SIGMA, TWO_SIGMA = 0.6827, 0.95


def analysed(cells, settings=SETTINGS, **how):
    return analyse_rates(table_from_columns(cells), settings, **how)


def covered(truth, estimates):
    """Return how often one sigma and the 95 percent interval hold the truth."""
    inside = [abs(one.value - truth) <= one.sigma for one in estimates]
    within = [one.interval[0] <= truth <= one.interval[1] for one in estimates]
    return np.mean(inside), np.mean(within)


def assert_coverage(truth, estimates):
    """Three binomial standard deviations either side of what is promised."""
    count = len(estimates)
    for found, promised in zip(covered(truth, estimates), (ONE_SIGMA, TWO_SIGMA), strict=True):
        assert abs(found - promised) < 3.0 * math.sqrt(promised * (1 - promised) / count), found


# --- theories ------------------------------------------------------------------------------------


@pytest.mark.published
@pytest.mark.parametrize(("ratio", "printed", "molecules"), [
    (4, 1.05e6, 65), (5, 1.57e11, 42), (6, 1.24e14, 30), (7, 8.99e15, 24), (8, 1.79e17, 19),
    (9, 1.65e18, 16), (10, 9.17e18, 14), (3, 1.76e-6, 131), (2, 5.02e-54, 523),
])
def test_classical_rates_of_the_textbook(ratio, printed, molecules):
    # Seinfeld and Pandis 2006, table 11.4: water at 293 K; critical sizes from memory but for
    # S = 4 and 5. The last decimal of J hangs on the constants of the book.
    liquid = (72.75e-3, 1000.0, 2.99e-26 * AVOGADRO)
    log10 = float(classical_log_rate(293.0, ratio * 2336.5, ratio, liquid)) / math.log(10) - 6.0
    assert log10 == pytest.approx(math.log10(printed), abs=0.06)
    assert float(critical_molecules(293.0, ratio, liquid)) == pytest.approx(molecules, abs=1.0)


@pytest.mark.published
@pytest.mark.parametrize(("kelvin", "tension", "ratio", "molecules"), [
    (273, 75.6e-3, 2, 726), (273, 75.6e-3, 3, 182), (273, 75.6e-3, 5, 58),
    (298, 72.0e-3, 2, 482), (298, 72.0e-3, 3, 121), (298, 72.0e-3, 4, 60), (298, 72.0e-3, 5, 39),
])
def test_critical_clusters_of_the_textbook(kelvin, tension, ratio, molecules):
    # Seinfeld and Pandis 2006, table 11.1; its entry of 87 at 273 K and S = 4 is 90.7 by the
    # formula of the same book and is left out.
    liquid = (tension, 1000.0, 2.99e-26 * AVOGADRO)
    found = float(critical_molecules(kelvin, ratio, liquid))
    assert found == pytest.approx(molecules, rel=0.01, abs=0.6)


@pytest.mark.published
@pytest.mark.parametrize(("kelvin", "ratio", "strey", "holten", "miller"), [
    (260, 7.5, 4.005e7, 2.94e8, 4.05e6), (250, 9.5, 1.573e8, 1.55e8, 1.44e7),
    (240, 12.0, 1.753e8, 8.30e7, 9.93e6), (230, 15.5, 1.393e8, 7.65e7, 3.22e6),
    (220, 21.0, 1.521e8, 1.52e8, None),
])
def test_published_fits_of_water(kelvin, ratio, strey, holten, miller):
    # Woelk and Strey 2001, Holten et al. 2005, Miller et al. 1983: their formulas worked out apart
    # from scatterfit, in 1/(cm3 s).
    names = {"woelk_strey_2001": strey, "holten_2005": holten, "miller_1983": miller}
    for name, rate in names.items():
        if rate is not None:
            found = math.exp(float(BY_NAME[name].log_rate(kelvin, ratio))) * 1e-6
            assert found == pytest.approx(rate, rel=4e-3)


@pytest.mark.parametrize(("kelvin", "ratio"), [(260, 7.24), (250, 8.79), (240, 10.98),
                                               (230, 14.16), (220, 18.94)])
def test_where_woelk_and_strey_reach_ten_million(kelvin, ratio):
    # Their formula solved for S at 1e7 per cm3 and s apart from scatterfit.
    found = math.exp(float(reference_theory(WATER).log_rate(kelvin, ratio))) * 1e-6
    assert math.log10(found) == pytest.approx(7.0, abs=0.02)


@pytest.mark.parametrize(("name", "shift"), [("classical_with_1_over_S", 1),
                                             ("classical_without_1_over_S", 2)])
@given(kelvin=st.floats(230, 300), ratio=st.floats(2.0, 20.0))
def test_nucleation_theorem_is_an_identity(name, shift, kelvin, ratio):
    # Kashchiev, J. Chem. Phys. 76 (1982) 5098: d ln J/d ln S = n* + 1, or + 2 without the 1/S.
    slope, _ = log_rate_slope(BY_NAME[name], kelvin, ratio)
    cluster = critical_molecules(kelvin, ratio, liquid_of(WATER, kelvin))
    assert float(slope) == pytest.approx(float(cluster) + shift, rel=1e-6)


def test_no_rate_without_supersaturation():
    for theory in theories(WATER):
        assert np.isneginf(theory.log_rate(250.0, np.array([0.5, 1.0]))).all()


def test_other_substances_have_classical_theory_alone():
    assert reference_theory(substance("1-propanol")).name == "classical_with_1_over_S"


# --- published isotherms -------------------------------------------------------------------------


@pytest.fixture(scope="module")
def published():
    rates = analysed(columns([WOELK_STREY, VIISANEN_STREY_REISS], corrected=True))
    return {isotherm.temperature: isotherm for isotherm in rates.isotherms}


@pytest.mark.published
@pytest.mark.parametrize("kelvin", sorted(FITTED))
def test_published_isotherms(published, kelvin):
    isotherm = published[kelvin]
    count, slope, sigma, ratio, cluster, theory, scatter = FITTED[kelvin]
    assert len(isotherm.measured.names) == count
    assert isotherm.slope.value == pytest.approx(slope, abs=0.06)
    assert isotherm.slope.sigma == pytest.approx(sigma, abs=0.06)
    assert isotherm.ratio_at[0][1].value == pytest.approx(ratio, abs=0.006)
    assert isotherm.theory["woelk_strey_2001"].estimate.value == pytest.approx(theory, abs=0.006)
    assert isotherm.theory["woelk_strey_2001"].scatter == pytest.approx(scatter, abs=0.011)
    liquid, _ = woelk_strey_liquid(kelvin)
    assert float(critical_molecules(kelvin, ratio, liquid)) == pytest.approx(cluster, abs=0.1)


@pytest.mark.published
def test_measured_rates_against_the_fit_of_the_same_paper(published):
    for kelvin in WOELK_STREY:
        assert abs(published[kelvin].theory["woelk_strey_2001"].estimate.value) < 0.25


@pytest.mark.published
def test_the_slip_is_an_outlier_and_is_kept():
    rates = analysed(columns([WOELK_STREY]))
    kelvin, ratio, _, _ = SLIP
    (isotherm,) = [one for one in rates.isotherms if one.temperature == kelvin]
    seen = isotherm.measured
    (name,) = isotherm.outliers
    assert seen.ratio[seen.names.index(name)] == ratio
    assert len(seen.names) == 33
    assert isotherm.robust.value == pytest.approx(29.6, abs=0.5)  # the slope without the slip
    assert isotherm.slope.value < 28.0
    assert sum(len(one.outliers) for one in rates.isotherms) == 1


# --- isotherms -----------------------------------------------------------------------------------


@pytest.mark.parametrize("scatter", [0.0, 0.05, 0.3])
@pytest.mark.parametrize("count", [6, 25, 100])
def test_isotherms_are_found(scatter, count):
    random = np.random.default_rng(7)
    middles = np.repeat([230.0, 235.0, 240.0, 250.0], count)
    groups = isotherms(middles + scatter * random.normal(size=middles.size))
    assert [set(middles[group]) for group in groups] == [{250.0}, {240.0}, {235.0}, {230.0}]


def test_one_isotherm_is_not_cut():
    random = np.random.default_rng(8)
    cut = [len(isotherms(250 + scatter * random.normal(size=40))) > 1
           for scatter in (0.02, 0.1, 0.3, 0.6) for _ in range(25)]
    assert np.mean(cut) < 0.05


@given(st.lists(st.floats(200, 300), min_size=1, max_size=40), st.floats(0.01, 20))
def test_a_stated_tolerance_holds(values, tolerance):
    groups = isotherms(values, tolerance)
    assert sorted(np.concatenate(groups).tolist()) == list(range(len(values)))
    for group in groups:
        assert np.ptp(np.array(values)[group]) <= 2 * tolerance * (1 + 1e-9)


@given(st.lists(st.floats(200, 300), min_size=1, max_size=60))
def test_natural_groups_are_a_partition_in_order(values):
    groups = natural_groups(values, 0.1)
    assert sorted(np.concatenate(groups).tolist()) == list(range(len(values)))
    tops = [max(values[place] for place in group) for group in groups]
    assert tops == sorted(tops)


def test_a_tolerance_must_be_positive():
    with pytest.raises(InvalidInputError, match="0 K"):
        isotherms([250.0], 0.0)


# --- lines ---------------------------------------------------------------------------------------


@pytest.mark.published
def test_line_through_the_data_of_pearson_with_the_weights_of_york():
    # York et al., Am. J. Phys. 72 (2004) 367, table II: the digits are cited from memory.
    x = np.array([0.0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
    y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
    weight_x = np.array([1e3, 1e3, 500, 800, 200, 80, 60, 20, 1.8, 1])
    weight_y = np.array([1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500.0])
    points = Points(x, y, 1 / weight_x, 1 / weight_y, np.zeros(10))
    line = fit_line(points, extra=False)
    assert line.slope == pytest.approx(-0.480533, abs=1e-6)
    assert float(line.at(0.0)) == pytest.approx(5.47991, abs=1e-5)
    assert line.slope_sigma == pytest.approx(0.0580, abs=1e-4)
    assert float(line.sigma_at(0.0)) == pytest.approx(0.2950, abs=1e-4)
    assert line.chi2_reduced == pytest.approx(1.4833, abs=1e-4)


def test_line_agrees_with_a_search_over_the_true_points():
    # The definition itself: 30 true x, level and slope are free, errors are correlated.
    random = np.random.default_rng(3)
    x, sigma_x, sigma_y = random.uniform(0, 1, 30), 0.05, 0.3
    y = 4 * x + sigma_y * random.normal(size=30)
    x = x + sigma_x * random.normal(size=30)
    shared = 0.4 * sigma_x * sigma_y
    points = Points(x, y, np.full(30, sigma_x**2), np.full(30, sigma_y**2), np.full(30, shared))
    whiten = np.linalg.inv(np.linalg.cholesky([[sigma_x**2, shared], [shared, sigma_y**2]]))

    def misfit(free):
        true = free[2:]
        return (whiten @ np.stack([x - true, y - free[0] - free[1] * true])).ravel()

    found = optimize.least_squares(misfit, np.r_[0.0, 3.0, x], x_scale="jac", xtol=1e-12).x
    line = fit_line(points, extra=False)
    assert line.slope == pytest.approx(found[1], rel=1e-5)
    assert float(line.at(0.0)) == pytest.approx(found[0], abs=1e-4)


@given(st.lists(st.tuples(st.floats(-3, 3), st.floats(-3, 3)), min_size=4, max_size=20,
                unique_by=lambda pair: round(pair[0], 2)))
def test_without_sigmas_the_line_is_ordinary_least_squares(pairs):
    x, y = np.array(pairs).T
    none = np.zeros(x.size)
    line = fit_line(Points(x, y, none, none, none))
    (slope, level), covariance = np.polyfit(x, y, 1, cov=True)
    assert line.slope == pytest.approx(slope, rel=1e-6, abs=1e-8)
    assert float(line.at(0.0)) == pytest.approx(level, rel=1e-6, abs=1e-8)
    assert line.slope_sigma == pytest.approx(math.sqrt(covariance[0, 0]), rel=1e-5, abs=1e-8)


def test_lines_that_the_data_do_not_give():
    none = np.zeros(2)
    assert fit_line(Points(np.ones(2), np.arange(2.0), none, none, none)) is None
    line = fit_line(Points(np.arange(2.0), np.arange(2.0), none, none, none))
    assert line.slope == pytest.approx(1.0)
    assert math.isnan(line.slope_sigma)


def test_robust_line_hardly_feels_a_wild_point():
    random = np.random.default_rng(4)
    x, none = np.linspace(0, 1, 30), np.zeros(30)
    y = 5 * x + 0.05 * random.normal(size=30)
    y[25] += 10
    points = Points(x, y, none, none, none)
    line = fit_line(points)
    robust, score = robust_line(points, line)
    assert abs(line.slope - 5) > 10 * abs(robust.slope - 5)
    assert np.flatnonzero(outliers(score)).tolist() == [25]


@pytest.mark.parametrize("freedom", [1, 2, 4, 10, 100])
def test_quantiles_against_scipy(freedom):
    tolerance = 2e-3 if freedom < 6 else 1e-4
    expected = special.stdtrit(freedom, 0.975)
    assert student_quantile(0.975, freedom) == pytest.approx(expected, rel=tolerance)
    for probability in (0.025, 0.975):
        expected = special.chdtri(freedom, 1 - probability)
        found = chi_square_quantile(probability, freedom)
        assert found == pytest.approx(expected, rel=0.02, abs=0.04)


# --- coverage ------------------------------------------------------------------------------------

TRUE_SLOPE, PULSES, REPEATS = 30.0, 25, 200


def one_night(random, *, rate=0.1, ratio=0.004, stated=True, shared=0.0, scatter=0.0):
    """Return a table of one isotherm with errors of J and S, some of them the same for all."""
    x = math.log(12.0) + random.uniform(-0.09, 0.09, PULSES)
    y = 16 + TRUE_SLOPE * (x - math.log(12.0)) + scatter * random.normal(size=PULSES)
    y = y + rate * random.normal(size=PULSES)
    seen = x + ratio * random.normal(size=PULSES) + shared * random.normal()
    cells = {T: np.full(PULSES, 240.0), S: np.exp(seen), J: np.exp(y)}
    if stated:
        cells |= {f"{S}_sigma": math.hypot(ratio, shared) * cells[S], f"{J}_sigma": rate * cells[J],
                  f"{S}_sigma_systematic": shared * cells[S]}
    return cells


@pytest.mark.parametrize("how", [
    {}, {"stated": False, "ratio": 0.0}, {"shared": 0.02}, {"scatter": 0.2},
    {"rate": 0.3, "ratio": 0.01},
], ids=["both-errors", "none-stated", "shared", "more-scatter", "large"])
def test_slopes_and_their_intervals_cover_the_truth(how):
    random = np.random.default_rng(11)
    found = [analysed(one_night(random, **how)).isotherms[0].slope for _ in range(REPEATS)]
    assert_coverage(TRUE_SLOPE, found)
    bias = np.mean([one.value for one in found]) - TRUE_SLOPE
    assert abs(bias) < 0.3 * found[0].sigma


def test_a_shared_error_of_the_supersaturation_is_in_what_is_quoted_at_a_rate():
    random = np.random.default_rng(12)
    true = 12.0 * math.exp((math.log(1e7) - 16) / TRUE_SLOPE)
    found = [analysed(one_night(random, shared=0.02)).isotherms[0].ratio_at[0][1]
             for _ in range(REPEATS)]
    assert_coverage(true, found)
    assert found[0].systematic > 3 * found[0].statistical


def test_a_shared_error_that_nobody_set_apart_is_found_out():
    random = np.random.default_rng(13)
    nights = []
    for _ in range(REPEATS // 2):
        cells = one_night(random, shared=0.02)
        del cells[f"{S}_sigma_systematic"]
        nights.append(analysed(cells).isotherms[0])
    assert np.mean([night.line.overstated for night in nights]) > 0.95
    assert_coverage(TRUE_SLOPE, [night.slope for night in nights])
    inside, _ = covered(12.0 * math.exp((math.log(1e7) - 16) / TRUE_SLOPE),
                        [night.ratio_at[0][1] for night in nights])
    assert inside > 0.6


def test_bringing_pulses_to_the_isotherm_takes_the_temperature_out():
    random = np.random.default_rng(14)
    law = reference_theory(WATER)
    kelvin = 240 + 0.3 * random.normal(size=60)
    ratio = 12 * np.exp(random.uniform(-0.08, 0.08, 60) - 0.05 * (kelvin - 240))
    cells = {T: kelvin, S: ratio, J: 1e-6 * np.exp(law.log_rate(kelvin, ratio))}
    plain = analysed(cells).isotherms[0]
    brought = analysed(cells, RateSettings(WATER, to_isotherm=True)).isotherms[0]
    middle = math.exp(float(np.mean(np.log(ratio))))
    true = float(log_rate_slope(law, brought.temperature, middle)[0])
    assert abs(plain.slope.value - true) > 1.0
    assert brought.slope.value == pytest.approx(true, abs=0.3)  # ln J bends a little
    assert plain.slope_corrected == pytest.approx(brought.slope.value)
    result = rates_to_dict(analysed(cells))["isotherms"][0]
    assert result["temperature_correction"]["rms_ln_rate"] == pytest.approx(0.22, abs=0.05)
    assert "temperature-spread" in {reason["code"] for reason in result["reasons"]}


def test_shared_error_of_temperature_moves_theory_both_ways():
    # T too high by 0.1 K makes S too low: the computed rate feels the difference of the two.
    cells = one_night(np.random.default_rng(15))
    law = reference_theory(WATER)
    by_ratio, by_kelvin = (float(part) for part in log_rate_slope(law, 240.0, 12.0))
    cells |= {f"{T}_sigma": np.full(PULSES, 0.1), f"{T}_sigma_systematic": np.full(PULSES, 0.1),
              f"{S}_sigma_systematic": 0.007 * cells[S],
              f"{S}_sigma": math.hypot(0.007, 0.004) * cells[S]}
    found = analysed(cells).isotherms[0].theory["woelk_strey_2001"].estimate
    expected = abs(by_ratio * 0.007 - by_kelvin * 0.1) / math.log(10)
    assert found.systematic == pytest.approx(expected, rel=0.05)


# --- pulses without a cloud ----------------------------------------------------------------------


def test_chance_of_nothing_is_averaged_over_scatter():
    draws = np.random.default_rng(16).normal(size=200_000)
    for above, sigma in ((-2.0, 0.3), (0.0, 0.5), (1.0, 0.3)):
        expected = np.mean(0.05 ** np.exp(above + sigma * draws))
        found = math.exp(log_chance_of_nothing([above], [0.0], [sigma])[0])
        assert found == pytest.approx(expected, rel=0.02, abs=2e-4)


def test_limits_far_above_the_line_change_nothing():
    random = np.random.default_rng(17)
    x, none = random.uniform(2.4, 2.6, 20), np.zeros(20)
    points = Points(x, 30 * x + 0.2 * random.normal(size=20), none, none, none)
    line = fit_line(points)
    far = with_limits(points, line, Limits(np.array([2.3]), np.array([90.0]), np.zeros(1)))
    assert far.slope == pytest.approx(line.slope, rel=1e-6)
    assert far.slope_sigma == pytest.approx(line.slope_sigma, rel=1e-3)


def test_pulses_without_a_cloud_take_out_the_bias_of_those_that_had_one():
    # A count of zero at an expectation of three is the limit of 95 percent.
    random = np.random.default_rng(18)
    with_them, without = [], []
    for _ in range(100):
        cells = one_night(random, rate=0.5, ratio=0.0, stated=False)
        limit = math.exp(15.0)
        seen = random.poisson(3 * cells[J] / limit) > 0
        rate = np.where(seen, cells[J], np.nan)
        cells |= {J: rate, "nucleation_rate_upper_limit_per_cm3_s": np.where(seen, np.nan, limit),
                  "verdict": ["accepted" if one else "rejected" for one in seen]}
        isotherm = analysed(cells).isotherms[0]
        assert len(isotherm.censored.names) == np.sum(~seen)
        with_them.append(isotherm.slope)
        only = {name: np.array(column)[seen] for name, column in cells.items()}
        without.append(analysed(only).isotherms[0].slope.value)
    assert abs(np.mean([one.value for one in with_them]) - TRUE_SLOPE) < 0.4
    assert np.mean(without) < TRUE_SLOPE - 0.8
    assert covered(TRUE_SLOPE, with_them)[1] > 0.9


def test_a_limit_of_the_number_becomes_one_of_the_rate():
    cells = {T: [240.0] * 4, S: [11.0, 11.5, 12.0, 10.0], J: [1e7, 4e7, 1.3e8, None],
             "concentration_per_cm3": [1e4, 4e4, 1.3e5, None],
             "nucleation_effective_ms": [0.8, 0.8, 0.8, 0.4],
             "upper_limit_per_cm3": [None, None, None, 5.0],
             "verdict": ["accepted", "accepted", "accepted", "rejected"]}
    (limit,) = analysed(cells).isotherms[0].censored.limit
    # Denser by 0.8 in the hold, 5 per cm3 over 0.4 ms.
    assert limit * 1e-6 == pytest.approx(5.0 * 0.8 / 0.4e-3)


def test_pulses_are_left_out_for_a_reason_that_is_told():
    cells = {T: [240.0] * 6 + [None], S: [11.0, 11.5, 12.0, 12.5, 0.9, 11.0, 11.0],
             J: [1e7, 4e7, 1.3e8, 4e8, 1.0, None, 1e7],
             "verdict": ["accepted", "ambiguous", "rejected", "failed", "accepted", "accepted", ""]}
    left = analysed(cells).left_out
    assert {name: count for name, count in left.items() if count} == {
        "ambiguous": 1, "rejected": 1, "failed": 1, "not-supersaturated": 1, "no-rate": 1,
        "no-conditions": 1}
    assert analysed(cells, ambiguous=True).left_out["ambiguous"] == 0


# --- holds, nights -------------------------------------------------------------------------------


def hold_cells(random, *, background=400.0, rate=2e7, blanks=4):
    """Return pulses of one state whose holds differ, with droplets that need no hold."""
    time = np.repeat([0.3, 0.6, 1.0, 1.5], 6)
    number = rate * time * 1e-3 + background
    number = number * (1 + 0.01 * random.normal(size=time.size))
    none = np.zeros(blanks)
    number = np.r_[number, background * (1 + 0.01 * random.normal(size=blanks))]
    time = np.r_[time, none]
    with np.errstate(divide="ignore"):
        rates = np.where(time > 0, number / (1e-3 * time), np.nan)
    return {T: np.full(time.size, 240.0), S: np.full(time.size, 11.5), J: rates,
            "concentration_per_cm3": number, "nucleation_effective_ms": time}


def test_hold_series_tells_rate_and_background_apart():
    random = np.random.default_rng(19)
    found = [analysed(hold_cells(random), series=True).series[0] for _ in range(100)]
    assert found[0].blanks == 4
    assert np.mean([one.rate.value for one in found]) * 1e-6 == pytest.approx(2e7, rel=2e-3)
    assert np.mean([one.background.value for one in found]) * 1e-6 == pytest.approx(400, rel=0.02)
    apart = [abs(one.background.value * 1e-6 - 400) < one.background.sigma * 1e-6 for one in found]
    assert np.mean(apart) > 0.6
    # The rate of a single pulse, number over duration, is too high by the background.
    assert np.nanmean(hold_cells(random)[J]) > 2.04e7


def test_two_nights_are_compared():
    random = np.random.default_rng(20)
    first, second = one_night(random), one_night(random)
    second[J] = second[J] * 2.0
    pair = [analysed(cells).isotherms for cells in (first, second)]
    (found,) = compare(*pair, SETTINGS)
    assert found.log10_rate.value == pytest.approx(math.log10(2), abs=3 * found.log10_rate.sigma)
    assert found.log10_rate.sigma < 0.03
    assert abs(found.slope.value) < 4 * found.slope.sigma


def test_pulses_are_divided_by_a_column():
    cells = one_night(np.random.default_rng(21))
    cells["gas"] = ["argon", "helium"] * 12 + ["argon"]
    rates = analysed(cells, by="gas")
    assert [(one.by, len(one.measured.names)) for one in rates.isotherms] == [
        ("argon", 13), ("helium", 12)]
