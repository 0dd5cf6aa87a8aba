"""What a user reads: the rounding rule, the summary of a pulse and its figure."""

import re
from decimal import Decimal
from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from matplotlib.colors import to_hex
from uncertainties import ufloat

from scatterfit.errors import InvalidInputError
from scatterfit.measured_pulse.record import MeasuredPulse
from scatterfit.report.comparison import comparison_text
from scatterfit.report.figures import WIDTH_INCH, pulse_figure, save_pulse_figure
from scatterfit.report.rounding import format_number, format_quantity, pretty_unit
from scatterfit.report.summary import WIDTH, summary_text

DIGITS = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")
PRINTED = re.compile(r"\(?(-?[\d.]+) ± ([\d.]+)\)?(?:×10([⁻⁰¹²³⁴⁵⁶⁷⁸⁹]+))?")
SCALARS = ("final_radius_um", "growth_rate_um_per_s", "area_rate_um2_per_s", "growth_scale",
           "radius_spread_percent", "droplet_temperature_K", "concentration_per_cm3", "birth_ms",
           "growth_saturation_ratio", "growth_temperature_K")


def quantity(value, sigma, **more):
    return {"value": value, "sigma": sigma, **more}


def accepted():
    """Return an invented result with every key filled in."""
    time = np.linspace(8.5, 100.0, 200)
    radius = 1.79245 * np.sqrt((time - 8.49) / 91.51)
    return {
        "schema": "scatterfit-result-1", "trace": "night/pulse-0017.csv", "verdict": "accepted",
        "reasons": [{"code": "an-invented-code", "text": "Something is so. " * 8}],
        "final_radius_um": quantity(1.79245, 0.00132), "final_ms": 100.0,
        "growth_rate_um_per_s": quantity(14.84, 0.21),
        "area_rate_um2_per_s": quantity(29.68, 0.42), "growth_scale": quantity(1.012, 0.014),
        "radius_spread_percent": quantity(0.62, 0.11),
        "droplet_temperature_K": quantity(273.45, 0.31),
        "concentration_per_cm3": quantity(5842.7, 117.0, sigma_statistical=23.0,
                                          sigma_systematic=115.0),
        "concentration_by": {"gain": quantity(5850.0, 121.0), "transmission": None,
                             "depletion": None},
        "upper_limit_per_cm3": None, "birth_ms": quantity(8.429, 0.012),
        "growth_saturation_ratio": quantity(1.49, 0.022),
        "growth_temperature_K": quantity(268.99, 0.19), "optical_depth": 0.01345,
        "nucleation": {"temperature_K": quantity(243.37, 0.18),
                       "pressure_kPa": quantity(54.42, 0.06),
                       "saturation_ratio": quantity(10.01, 0.19),
                       "effective_ms": quantity(1.221, 0.05),
                       "rate_per_cm3_s": quantity(4.11e6, 2.1e5),
                       "temperature_saturation_covariance_K": -0.03},
        "curve": {"time_ms": time.tolist(), "radius_um": radius.tolist(),
                  "sigma_um": np.full(200, 0.0013).tolist()},
        "extrema": [{"time_ms": 30.0, "radius_um": 0.86, "kind": kind, "column": "scatter1_V"}
                    for kind in ("maximum", "minimum", "shoulder")],
        "alternatives": [{"final_radius_um": 2.0312, "concentration_per_cm3": None,
                          "delta_chi2": 812.0}],
        "chi2_reduced": 1.013, "residual_lag1": 0.012,
        "budget": [{"input": "chamber.temperature_K", "quantity": "final_radius_um",
                    "sigma": 0.001, "share": 0.62}],
        "learnt": [{"input": "chamber.temperature_K", "moved_sigmas": 0.3, "sigma_left": 0.8}],
        "monte_carlo": None,
        "provenance": {"overrides": {"chamber.temperature_K": 297.15},
                       "exclude_ms": [[10.0, 12.5]]},
    }


def rejected():
    """Return an invented result that claims nothing but an upper limit."""
    return accepted() | dict.fromkeys(SCALARS) | {
        "verdict": "rejected", "final_ms": None, "upper_limit_per_cm3": 3.21, "extrema": [],
        "concentration_by": dict.fromkeys(("gain", "transmission", "depletion")),
        "curve": {"time_ms": [], "radius_um": [], "sigma_um": []}, "alternatives": [],
        "chi2_reduced": None, "residual_lag1": None, "budget": [], "optical_depth": None,
        "learnt": [],
        "nucleation": dict.fromkeys(accepted()["nucleation"]), "provenance": {},
    }


def test_the_invented_results_have_the_keys_of_real_ones():
    empty = MeasuredPulse("pulse.csv", "rejected").to_dict()
    for result in (accepted(), rejected()):
        assert result.keys() == empty.keys()
        assert result["nucleation"].keys() == empty["nucleation"].keys()
        assert result["concentration_by"].keys() == empty["concentration_by"].keys()
    assert "not determined" in summary_text(empty)
    assert "±" not in summary_text(empty)


def channel(column="scatter1_V", label="scattered, 30°", *, fitted=True):
    time = np.linspace(-5e-3, 0.1, 400)
    wave = 1.0 + np.sin(200.0 * time)
    used = time > 0
    return SimpleNamespace(column=column, label=label, time=time, signal=wave, used=used,
                           fit=wave if fitted else np.full(400, np.nan),
                           residual=np.cos(9e3 * time) if fitted else np.full(400, np.nan))


@given(
    st.floats(min_value=-1e12, max_value=1e12).filter(lambda x: x == 0 or abs(x) > 1e-12),
    st.floats(min_value=1e-12, max_value=1e12),
)
def test_printed_quantity_is_the_number_rounded_at_the_second_digit_of_sigma(value, sigma):
    number, error, power = PRINTED.fullmatch(format_quantity(value, sigma)).groups()
    decimals = len(error.partition(".")[2])
    digits = error.replace(".", "").lstrip("0")
    assert len(number.partition(".")[2]) == decimals
    # A whole number such as 120 ends in zeros that only stand for the decimal place.
    assert set(digits[2:]) <= {"0"}
    place = Decimal(1).scaleb(len(digits) - 2 - decimals)
    scale = Decimal(1).scaleb(int((power or "0").translate(DIGITS)))
    assert abs(Decimal(error) * scale - Decimal(repr(sigma))) <= place * scale / 2
    assert abs(Decimal(number) * scale - Decimal(repr(value))) <= place * scale / 2


@pytest.mark.parametrize(("value", "sigma"), [
    (1.79246, 0.00132), (5842.7, 117.0), (1.0, 0.0999), (-3.3, 0.21), (0.0, 0.5), (272.3, 12.3),
])
def test_rounding_agrees_with_a_general_library(value, sigma):
    # Source: the package `uncertainties`, format "2u" (two digits of the uncertainty).
    theirs = re.fullmatch(r"\(?(.*?)\+/-(.*?)\)?(?:e([+-]\d+))?", f"{ufloat(value, sigma):.2ue}")
    scale = 10.0 ** int(theirs[3] or 0)
    ours = PRINTED.fullmatch(format_quantity(value, sigma))
    assert float(ours[1]) == pytest.approx(float(theirs[1]) * scale, rel=1e-12)
    assert float(ours[2]) == pytest.approx(float(theirs[2]) * scale, rel=1e-12)


@pytest.mark.parametrize(("value", "sigma", "text"), [
    (1.79245, 0.00132, "1.7925 ± 0.0013"),
    (4.1104e6, 1.234e6, "(4.1 ± 1.2)×10⁶"),
    (5842.7, 117.0, "5840 ± 120"),
    (-0.0001, 0.5, "0.00 ± 0.50"),
    (5.0, 2.0e5, "(0.0 ± 2.0)×10⁵"),
    (1e15, 1e-15, "(1." + 31 * "0" + " ± 0." + 29 * "0" + "10)×10¹⁵"),
])
def test_rounding_to_the_letter(value, sigma, text):
    assert format_quantity(value, sigma) == text


def test_a_missing_number_is_said_so():
    assert format_quantity(None, None, "um") == "not determined"
    assert format_number(None, "ms") == "not determined"
    assert "uncertainty not determined" in format_quantity(1.0, None, "um")


@pytest.mark.parametrize(("value", "sigma"), [(float("nan"), 1.0), (1.0, float("inf")), (1.0, -1)])
def test_impossible_numbers_are_refused(value, sigma):
    with pytest.raises(InvalidInputError, match="must"):
        format_quantity(value, sigma)


@pytest.mark.parametrize(("unit", "text"), [
    ("um", "µm"), ("1/cm3", "cm⁻³"), ("um2/s", "µm² s⁻¹"), ("1/(cm3 s)", "cm⁻³ s⁻¹"), ("K", "K"),
    ("", ""), ("percent", "%"),
])
def test_units_in_print(unit, text):
    assert pretty_unit(unit) == text


@pytest.mark.parametrize("result", [accepted(), rejected()], ids=["accepted", "rejected"])
def test_summary_keeps_to_the_width_and_says_the_verdict_first(result):
    lines = summary_text(result).splitlines()
    assert max(map(len, lines)) <= WIDTH
    assert lines[0] == f"{result['verdict'].upper()}  night/pulse-0017.csv"
    assert "[an-invented-code]" in lines[2]


def test_summary_shows_the_numbers_with_their_uncertainty_and_unit():
    text = summary_text(accepted())
    for expected in ("1.7925 ± 0.0013 µm", "14.84 ± 0.21 µm s⁻¹", "5840 ± 120 cm⁻³",
                     "(4.11 ± 0.21)×10⁶ cm⁻³ s⁻¹", "62 %", "chamber.temperature_K = 297.15",
                     "excluded: 10 to 12.5 ms", "2.031 µm"):
        assert expected in text


def test_summary_invents_nothing():
    result = rejected()
    text = summary_text(result)
    assert "±" not in text
    assert "3.2 cm⁻³" in text
    assert "Droplets: not determined" in text


def test_summary_of_a_file_that_could_not_be_used_is_short():
    result = rejected() | {"verdict": "failed"}
    assert len(summary_text(result).splitlines()) <= 6


def test_figure_has_a_panel_for_each_trace_its_residuals_and_the_radius():
    figure = pulse_figure(accepted(), [channel(), channel("transmitted_V", "transmitted")])
    labels = [axis.get_ylabel() for axis in figure.axes]
    assert labels == ["scattered, 30°\nscatter1_V [V]", "residual\n[noise]",
                      "transmitted\ntransmitted_V [V]",
                      "residual\n[noise]", "radius\n[µm]"]
    assert figure.axes[-1].get_xlabel() == "time [ms]"
    assert "accepted" in figure.get_suptitle()
    assert figure.get_figwidth() == WIDTH_INCH


def test_figure_marks_every_matched_extremum():
    radius = pulse_figure(accepted(), [channel()]).axes[-1]
    markers = [line.get_marker() for line in radius.lines if line.get_marker() != "None"]
    assert sorted(markers) == ["^", "s", "v"]


def test_figure_of_a_rejected_pulse_shows_the_trace_alone():
    figure = pulse_figure(rejected(), [channel(fitted=False)])
    assert [axis.get_ylabel() for axis in figure.axes] == ["scattered, 30°\nscatter1_V [V]"]
    assert "rejected" in figure.get_suptitle()
    assert "95 percent" in figure.get_suptitle()


def test_figure_without_channels_still_says_the_verdict():
    assert "failed" in pulse_figure(rejected() | {"verdict": "failed"}, []).get_suptitle()


def test_channels_differ_in_colour():
    channels = [channel(f"scatter{i}_V") for i in range(4)]
    figure = pulse_figure(rejected(), channels)
    colours = {to_hex(axis.lines[1].get_color()) for axis in figure.axes[::2]}
    assert len(colours) == 4


TRUTH = {"final_radius_um": 1.79113, "N_per_cm3": 5842.7, "birth_ms": 8.429, "S_growth": 1.49,
         "T_nuc": 243.37, "S_nuc": 10.01, "J_per_cm3_s": 4.11e6}


def test_comparison_states_the_difference_in_sigmas():
    lines = comparison_text("a.csv", accepted(), TRUTH).splitlines()
    assert lines[0] == "a.csv: accepted (an-invented-code)"
    assert lines[2].split()[-2:] == ["+1.0", "σ"]
    assert lines[3].split()[-2:] == ["+0.0", "σ"]
    assert max(map(len, lines)) <= WIDTH


def test_comparison_of_a_blank_shows_the_limit():
    text = comparison_text("b.csv", rejected(), TRUTH | {"N_per_cm3": 0.0})
    assert "at most 3.2" in text
    assert "σ" not in text


def test_comparison_of_seeded_pulses_claims_no_rate():
    text = comparison_text("c.csv", rejected(), TRUTH | {"J_per_cm3_s": None})
    assert re.search(r"nucleation rate.*not determined +-$", text, re.MULTILINE)


@pytest.mark.parametrize("suffix", ["png", "pdf", "svg"])
def test_figure_is_written_in_the_format_of_its_suffix(tmp_path, suffix):
    path = tmp_path / f"pulse.{suffix}"
    save_pulse_figure(path, accepted(), [channel()])
    starts = {"png": b"\x89PNG", "pdf": b"%PDF", "svg": b"<?xml"}
    assert path.read_bytes().startswith(starts[suffix])
