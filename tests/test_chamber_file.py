"""The chamber file: what it says becomes a bench in SI, and every mistake gets one clear line."""

import math
import tomllib
from dataclasses import fields

import pytest
import scipy.constants
from hypothesis import given, settings
from hypothesis import strategies as st
from shared_data import PRACTICE, needs_practice

from scatterfit.apparatus import records
from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides, nearest
from scatterfit.apparatus.keys import HUMIDITY, KEYS, TABLES, allowed_names, key_table
from scatterfit.apparatus.overrides import known_paths, split_path
from scatterfit.apparatus.saturation import saturation_before
from scatterfit.errors import ChamberFileError, InvalidInputError
from scatterfit.files import read_chamber, read_chamber_mapping
from scatterfit.units import UNITS, from_si, to_si

GAUGE = """
[beam]
wavelength_nm = 532.0
polarization = "perpendicular"

[[detector]]
column = "scatter1_V"
angle_deg = 30.0
half_angle_deg = 2.0
gain_V_m = 2e5

[transmission]
column = "transmitted_V"
path_mm = 120.0

[pressure]
column = "gauge_kPa"

[vapour]
substance = "water"
mole_fraction = 0.012

[gas]
carrier = "argon"

[chamber]
temperature_K = 296.15
pressure_kPa = 92.0
path_mm = 120.0
"""

NO_GAUGE = GAUGE.replace('[pressure]\ncolumn = "gauge_kPa"',
                         "[growth]\ntemperature_K = 265.0\npressure_kPa = 70.0")


def bench_of(text):
    return apparatus_from_mapping(tomllib.loads(text))


def refusal(text, tmp_path):
    """Return the one line that a chamber file is refused with."""
    path = tmp_path / "bench.toml"
    path.write_text(text, encoding="utf-8")
    with pytest.raises(ChamberFileError) as caught:
        read_chamber(path)
    message = str(caught.value)
    assert message.isprintable(), "one line"
    assert message.startswith(f"{path}: ")
    return message.removeprefix(f"{path}: ")


# --- what is understood -------------------------------------------------------------------------


def test_numbers_arrive_in_si():
    bench = bench_of(GAUGE + """
[seed]
concentration_per_cm3 = 1000.0
diameter_nm = 80.0

[analysis]
baseline_ms = [-5, -1.0]
max_radius_um = 8
""")
    assert bench.beam.wavelength == 532e-9
    assert bench.beam.polarization == math.pi / 2
    detector = bench.detectors[0]
    assert detector.column == "scatter1_V"
    assert detector.angle == pytest.approx(math.radians(30), rel=1e-15)
    assert detector.half_angle == pytest.approx(math.radians(2), rel=1e-15)
    assert (detector.gain, detector.time_constant, detector.dark) == (2e5, 0.0, None)
    assert bench.transmission.path == 0.12
    assert bench.chamber.pressure == 92e3
    assert bench.seed == records.Seed(concentration=1e9, diameter=80e-9)
    assert bench.analysis.baseline == (-5e-3, -1e-3)
    assert bench.analysis.reference_radius == 1e-6
    assert bench.analysis.max_radius == 8e-6
    assert bench.carrier == {"argon": 1.0}


def test_sigmas_are_found_everywhere_in_the_unit_of_the_record():
    text = GAUGE.replace("angle_deg = 30.0", "angle_deg = 30.0\nangle_deg_sigma = 0.15", 1)
    text = text.replace("gain_V_m = 2e5", "gain_V_m = 2e5\ngain_V_m_sigma = 6e3\n")
    text = text.replace("mole_fraction = 0.012", """mole_fraction = 0.012
mole_fraction_sigma = 1e-4
refractive_index = [1.3368, 0.001]
refractive_index_sigma = 0.0005
mass_accommodation_sigma = 0.1
diffusivity_mm2_s_sigma = 0.5
density_kg_m3_sigma = 0""")
    text = text.replace("temperature_K = 296.15", "temperature_K = 296.15\ntemperature_K_sigma=0.2")
    text = text.replace('carrier = "argon"', "carrier = {Ar = 0.7, he = 0.3, he_sigma = 0.01}")
    bench = bench_of(text.replace("[pressure]", "[pressure]\noffset_kPa_sigma = 0.1"))
    assert bench.sigmas == pytest.approx({
        "detector.scatter1_V.angle_deg": math.radians(0.15),
        "detector.scatter1_V.gain_V_m": 6e3,
        "vapour.mole_fraction": 1e-4,
        "vapour.refractive_index": 0.0005,
        "vapour.mass_accommodation": 0.1,
        "vapour.diffusivity_mm2_s": 0.5e-6,
        "chamber.temperature_K": 0.2,
        "gas.carrier.he": 0.01,
        "pressure.offset_kPa": 100.0,
    })
    assert bench.carrier == {"argon": 0.7, "helium": 0.3}
    assert bench.vapour.refractive_index == 1.3368 + 0.001j


def test_two_sigmas_of_an_absorbing_liquid():
    text = GAUGE.replace("mole_fraction = 0.012", "mole_fraction = 0.012\n"
                         "refractive_index = [1.4, 0.01]\nrefractive_index_sigma = [0.002, 0.003]")
    bench = bench_of(text)
    assert bench.sigmas["vapour.refractive_index"] == 0.002
    assert bench.sigmas["vapour.refractive_index_k"] == 0.003


@pytest.mark.parametrize(("written", "angle"), [
    ('"perpendicular"', math.pi / 2), ('"parallel"', 0.0), ('"unpolarized"', None),
    ("45", math.pi / 4), ("-30.0", -math.pi / 6),
])
def test_polarization_in_words_or_degrees(written, angle):
    bench = bench_of(GAUGE.replace('"perpendicular"', written))
    assert bench.beam.polarization == (angle if angle is None else pytest.approx(angle))


def test_every_property_of_the_vapour_can_be_overridden():
    overriding = [key for key in KEYS if key.property_name]
    assert len(overriding) == 10
    lines = "\n".join(f"{key.name} = {key.example}" for key in overriding)
    bench = bench_of(GAUGE.replace("mole_fraction = 0.012", f"mole_fraction = 0.012\n{lines}"))
    assert bench.vapour.overrides == {
        key.property_name: to_si(float(key.example), key.unit) for key in overriding}
    assert bench.vapour.overrides["latent_heat"] == 44500.0
    assert bench.vapour.overrides["diffusivity"] == pytest.approx(22e-6)


def test_a_substance_by_cas_number_gets_its_canonical_name():
    assert bench_of(GAUGE.replace('"water"', '"7732-18-5"')).vapour.substance == "water"


def test_transmission_alone_is_a_bench():
    start, end = GAUGE.index("[[detector]]"), GAUGE.index("[transmission]")
    bench = bench_of(GAUGE[:start] + GAUGE[end:])
    assert bench.detectors == ()


def test_a_background_is_read_with_its_sigmas():
    bench = bench_of(GAUGE + "[background]\nconcentration_per_cm3 = 5e4\n"
                     "concentration_per_cm3_sigma = 1e4\ndiameter_nm = 200.0\n")
    assert bench.background == records.Background(5e10, pytest.approx(200e-9))
    assert bench.sigmas["background.concentration_per_cm3"] == 1e10


@pytest.mark.parametrize(("lines", "parts"), [
    ("concentration_per_cm3 = 5e4", ["background.diameter_nm is missing", "200.0"]),
    ("diameter_nm = 200.0", ["background.concentration_per_cm3 is missing"]),
    ("concentration_per_cm3 = -1\ndiameter_nm = 200.0", ["concentration_per_cm3 = -1", "at least"]),
    ("concentration_per_cm3 = 1\ndiameter_um = 0.2", ["diameter_um", "did you mean diameter_nm?"]),
    ("concentration_per_cm3 = 1\ndiameter_nm = 0.2", ["diameter_nm = 0.2", "at least 5"]),
])
def test_a_wrong_background_is_one_line(lines, parts):
    with pytest.raises(ChamberFileError) as error:
        bench_of(f"{GAUGE}[background]\n{lines}\n")
    text = str(error.value)
    assert "\n" not in text
    assert all(part in text for part in parts), text


def test_an_empty_seed_table_counts():
    assert bench_of(GAUGE + "[seed]\n").seed == records.Seed()
    assert bench_of(GAUGE).seed is None


def test_growth_and_hold_without_a_gauge():
    bench = bench_of(NO_GAUGE + "[pulse]\nhold_ms = 1.2\n")
    assert bench.growth == records.GasState(temperature=265.0, pressure=70e3)
    assert bench.pulse.hold == pytest.approx(1.2e-3)


def test_the_pressure_may_come_from_the_trace():
    assert bench_of(GAUGE.replace("pressure_kPa = 92.0", "")).chamber.pressure is None


@pytest.mark.parametrize("humidity", [
    "mole_fraction = 0.013349", "partial_pressure_kPa = 1.2281", "saturation_ratio = 0.43699",
    "dew_point_K = 283.15",
])
def test_four_ways_to_state_the_same_vapour(humidity):
    """Water has 1.2281 kPa at 283.15 K and 2.8104 kPa at 296.15 K (CRC Handbook, from memory)."""
    bench = bench_of(GAUGE.replace("mole_fraction = 0.012", humidity))
    assert saturation_before(bench, bench.chamber.pressure) == pytest.approx(0.43699, rel=2e-3)


# --- mistakes -----------------------------------------------------------------------------------

# what is replaced, by what, and what the message must hold
MISTAKES = {
    "unknown key": ("wavelength_nm = 532.0", "wavelenght_nm = 532.0",
                    ["beam.wavelenght_nm = 532.0", "did you mean wavelength_nm?"]),
    "unit mistaken": ("path_mm = 120.0\n\n[pressure]", "path_cm = 12.0\n\n[pressure]",
                      ["transmission.path_cm = 12.0", "did you mean path_mm?"]),
    "unknown table": ("[vapour]", "[vapor]", ["vapor = {", "did you mean vapour?"]),
    "unknown sigma": ("gain_V_m = 2e5", "gain_V_m = 2e5\ngain_V_m_sgima = 1e3",
                      ["detector.scatter1_V.gain_V_m_sgima = 1000.0",
                       "did you mean gain_V_m_sigma?"]),
    "key outside a table": ("\n[beam]", "temperature_K = 296.0\n[beam]",
                            ["temperature_K = 296.0", "did you mean chamber.temperature_K?"]),
    "key missing": ("wavelength_nm = 532.0", "", ["beam.wavelength_nm is missing"]),
    "detector's key missing": ("angle_deg = 30.0\n", "",
                               ["detector.scatter1_V.angle_deg is missing"]),
    "detector's column missing": ('column = "scatter1_V"', "",
                                  ["detector[1].column is missing"]),
    "table missing": ('[gas]\ncarrier = "argon"', "", ["gas", "[gas] is missing"]),
    "text for number": ("wavelength_nm = 532.0", 'wavelength_nm = "532,0"',
                        ['beam.wavelength_nm = "532,0"', "must be a number", "decimal point"]),
    "truth for number": ("angle_deg = 30.0", "angle_deg = true",
                         ["detector.scatter1_V.angle_deg = true", "must be a number"]),
    "list for number": ("angle_deg = 30.0", "angle_deg = [30.0]",
                        ["detector.scatter1_V.angle_deg = [30.0]", "must be a number"]),
    "date for number": ("angle_deg = 30.0", "angle_deg = 2024-01-01",
                        ["detector.scatter1_V.angle_deg = 2024-01-01", "must be a number"]),
    "not a number": ("angle_deg = 30.0", "angle_deg = nan",
                     ["detector.scatter1_V.angle_deg = nan", "finite"]),
    "infinite": ("gain_V_m = 2e5", "gain_V_m = inf",
                 ["detector.scatter1_V.gain_V_m = inf", "finite"]),
    "integer without end": ("gain_V_m = 2e5", "gain_V_m = 1" + 400 * "0",
                            ["detector.scatter1_V.gain_V_m = 1000", "finite"]),
    "number for text": ('substance = "water"', "substance = 18",
                        ["vapour.substance = 18", "text in quotes"]),
    "empty text": ('substance = "water"', 'substance = " "',
                   ['vapour.substance = " "', "text in quotes"]),
    "unknown substance": ('substance = "water"', 'substance = "watr"',
                          ['vapour.substance = "watr"', "did you mean 'water'"]),
    "unknown carrier": ('carrier = "argon"', 'carrier = "argn"',
                        ['gas.carrier = "argn"', "did you mean 'argon'"]),
    "carrier is a number": ('carrier = "argon"', "carrier = 1",
                            ["gas.carrier = 1", "must be a name, or a table"]),
    "fractions": ('carrier = "argon"', "carrier = {argon = 0.7, helium = 0.2}",
                  ["gas.carrier = {argon = 0.7, helium = 0.2}", "add up to 0.9"]),
    "fraction above one": ('carrier = "argon"', "carrier = {argon = 1.7, helium = -0.7}",
                           ["gas.carrier.argon = 1.7", "at most 1"]),
    "fraction as text": ('carrier = "argon"', 'carrier = {argon = "all"}',
                         ['gas.carrier.argon = "all"', "must be a number"]),
    "fraction's sigma alone": ('carrier = "argon"', "carrier = {argon = 1.0, neon_sigma = 0.1}",
                               ["gas.carrier.neon_sigma = 0.1", "there is no gas.carrier.neon"]),
    "polarization": ('"perpendicular"', '"unpolarised"',
                     ['beam.polarization = "unpolarised"', 'did you mean "unpolarized"?']),
    "polarization angle": ('"perpendicular"', "200",
                           ["beam.polarization = 200", "at most 180"]),
    "sigma of no angle": ('"perpendicular"', '"unpolarized"\npolarization_sigma = 2.0',
                          ["beam.polarization_sigma = 2.0", "no angle"]),
    "wavelength in um": ("wavelength_nm = 532.0", "wavelength_nm = 0.532",
                         ["beam.wavelength_nm = 0.532", "at least 200 and at most 2000 (nm)"]),
    "angle": ("angle_deg = 30.0", "angle_deg = 190",
              ["detector.scatter1_V.angle_deg = 190:", "at least 0 and at most 180 (deg)"]),
    "half angle": ("half_angle_deg = 2.0", "half_angle_deg = 25.0",
                   ["detector.scatter1_V.half_angle_deg = 25.0", "at most 20"]),
    "half angle of nothing": ("half_angle_deg = 2.0", "half_angle_deg = 0.0",
                              ["detector.scatter1_V.half_angle_deg = 0.0", "above 0"]),
    "cone in the beam": ("angle_deg = 30.0\nhalf_angle_deg = 2.0",
                         "angle_deg = 3.0\nhalf_angle_deg = 4.0",
                         ["detector.scatter1_V.half_angle_deg = 4.0", "direct beam"]),
    "celsius": ("temperature_K = 296.15", "temperature_K = 23.0",
                ["chamber.temperature_K = 23.0", "at least 100"]),
    "negative temperature": ("temperature_K = 296.15", "temperature_K = -5",
                             ["chamber.temperature_K = -5", "(K)"]),
    "negative pressure": ("pressure_kPa = 92.0", "pressure_kPa = -92.0",
                          ["chamber.pressure_kPa = -92.0", "above 0"]),
    "mole fraction": ("mole_fraction = 0.012", "mole_fraction = 1.2",
                      ["vapour.mole_fraction = 1.2", "above 0 and below 1"]),
    "no vapour at all": ("mole_fraction = 0.012", "mole_fraction = 0",
                         ["vapour.mole_fraction = 0:", "above 0"]),
    "vapour not stated": ("mole_fraction = 0.012", "",
                          ["vapour", "exactly one of mole_fraction", "dew_point_K"]),
    "vapour stated twice": ("mole_fraction = 0.012", "mole_fraction = 0.012\ndew_point_K = 281.0",
                            ["vapour.dew_point_K = 281.0", "mole_fraction says the same"]),
    "above saturation": ("mole_fraction = 0.012", "mole_fraction = 0.035",
                         ["vapour.mole_fraction = 0.035", "above saturation", "at most 0.0305"]),
    "partial pressure above saturation": (
        "mole_fraction = 0.012", "partial_pressure_kPa = 3.2",
        ["vapour.partial_pressure_kPa = 3.2", "above saturation", "at most 2.81"]),
    "partial pressure above pressure": (
        "mole_fraction = 0.012", "partial_pressure_kPa = 95.0",
        ["vapour.partial_pressure_kPa = 95.0", "below the chamber's pressure, 92 kPa"]),
    "saturation ratio": ("mole_fraction = 0.012", "saturation_ratio = 1.1",
                         ["vapour.saturation_ratio = 1.1", "above saturation", "at most 1 "]),
    "dew point": ("mole_fraction = 0.012", "dew_point_K = 299.0",
                  ["vapour.dew_point_K = 299", "above saturation", "at most 296.1"]),
    "accommodation": ("mole_fraction = 0.012", "mole_fraction = 0.012\nmass_accommodation = 1.5",
                      ["vapour.mass_accommodation = 1.5", "at most 1"]),
    "density in g/cm3": ("mole_fraction = 0.012", "mole_fraction = 0.012\ndensity_kg_m3 = 0.998",
                         ["vapour.density_kg_m3 = 0.998", "at least 100"]),
    "index": ("mole_fraction = 0.012", "mole_fraction = 0.012\nrefractive_index = [1.3, 0.0, 1.0]",
              ["vapour.refractive_index = [1.3, 0.0, 1.0]", "[n, k]"]),
    "index below one": ("mole_fraction = 0.012", "mole_fraction = 0.012\nrefractive_index = 0.33",
                        ["vapour.refractive_index = 0.33", "n must be at least 1"]),
    "negative absorption": (
        "mole_fraction = 0.012", "mole_fraction = 0.012\nrefractive_index = [1.3, -0.1]",
        ["vapour.refractive_index = [1.3, -0.1]", "k must be at least 0"]),
    "three sigmas of an index": (
        "mole_fraction = 0.012", "mole_fraction = 0.012\nrefractive_index_sigma = [0.1, 0.1, 0.1]",
        ["vapour.refractive_index_sigma = [0.1, 0.1, 0.1]", "must be one number or"]),
    "negative sigma": ("temperature_K = 296.15", "temperature_K = 296.15\ntemperature_K_sigma = -1",
                       ["chamber.temperature_K_sigma = -1", "must not be negative"]),
    "sigma as text": ("temperature_K = 296.15",
                      'temperature_K = 296.15\ntemperature_K_sigma = "0.1 K"',
                      ['chamber.temperature_K_sigma = "0.1 K"', "must be a number"]),
    "sigma of nothing": ("gain_V_m = 2e5", "gain_V_m_sigma = 1e3",
                         ["detector.scatter1_V.gain_V_m_sigma = 1000.0",
                          "there is no detector.scatter1_V.gain_V_m"]),
    "column without unit": ('"scatter1_V"', '"scatter1"',
                            ['detector.scatter1.column = "scatter1"', "end in _V or _mV"]),
    "pressure column without unit": ('"gauge_kPa"', '"gauge_psi"',
                                     ['pressure.column = "gauge_psi"', "_kPa", "_Torr"]),
    "column twice": ('"transmitted_V"', '"scatter1_V"',
                     ['transmission.column = "scatter1_V"', "detector.scatter1_V.column"]),
    "no channel": (GAUGE[GAUGE.index("[[detector]]"):GAUGE.index("[pressure]")], "",
                   ["detector", "at least one [[detector]] or a [transmission]"]),
    "detector as one table": ("[[detector]]", "[detector]", ["detector = {", "[[detector]]"]),
    "gas as many tables": ("[gas]", "[[gas]]", ["gas = [{", "one table, [gas]"]),
    "beam as a number": ("[beam]", "beam = 3\n[seed]", ["beam = 3", "[beam]", "[[beam]]"]),
    "table is a number": ("[beam]", "seed = 3\n[beam]", ["seed = 3", "[seed]"]),
    "growth beside a gauge": ("[gas]", "[growth]\ntemperature_K = 265\npressure_kPa = 70\n[gas]",
                              ["growth = {temperature_K = 265", "[pressure]", "leave out"]),
    "neither growth nor gauge": ('[pressure]\ncolumn = "gauge_kPa"', "",
                                 ["growth", "without a [pressure] trace", "[growth]"]),
    "range": ("[gas]", "[analysis]\nwindow_ms = 5.0\n[gas]",
              ["analysis.window_ms = 5.0", "[first, last]"]),
    "range backwards": ("[gas]", "[analysis]\nwindow_ms = [5.0, -5.0]\n[gas]",
                        ["analysis.window_ms = [5.0, -5.0]", "below the second"]),
    "range of texts": ("[gas]", '[analysis]\nwindow_ms = ["a", "b"]\n[gas]',
                       ['analysis.window_ms = "a"', "must be a number"]),
    "sigma of a range": ("[gas]", "[analysis]\nwindow_ms_sigma = 1.0\n[gas]",
                         ["analysis.window_ms_sigma = 1.0", "unknown key"]),
    "reference radius": ("[gas]", "[analysis]\nreference_radius_um = 12.0\n[gas]",
                         ["analysis.reference_radius_um = 12.0", "10 um"]),
    "largest radius": ("[gas]", "[analysis]\nmax_radius_um = 0.5\n[gas]",
                       ["analysis.max_radius_um = 0.5", "1 um"]),
    "not TOML": ("wavelength_nm = 532.0", "wavelength_nm = 532,0",
                 ["not a TOML file", "line 3"]),
    "key twice": ("wavelength_nm = 532.0", "wavelength_nm = 532.0\nwavelength_nm = 633.0",
                  ["not a TOML file", "line 4"]),
    "digits without end": ("gain_V_m = 2e5", "gain_V_m = 1" + 5000 * "0", ["not a TOML file"]),
    "line break in a key": ("[gas]", '"a\\nb" = 1\n[gas]', ["vapour.a\\nb = 1", "unknown key"]),
}


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_gets_one_line(name, tmp_path):
    before, after, expected = MISTAKES[name]
    assert before in GAUGE
    message = refusal(GAUGE.replace(before, after, 1), tmp_path)
    for part in expected:
        assert part in message


def test_two_detectors_in_one_column(tmp_path):
    start, end = GAUGE.index("[[detector]]"), GAUGE.index("[transmission]")
    message = refusal(GAUGE[:end] + GAUGE[start:], tmp_path)
    assert 'detector.scatter1_V.column = "scatter1_V"' in message
    assert "another detector" in message


def test_no_pressure_before_the_expansion(tmp_path):
    text = NO_GAUGE.replace("pressure_kPa = 92.0", "")
    assert "chamber.pressure_kPa is missing" in refusal(text, tmp_path)


def test_growth_needs_both_numbers(tmp_path):
    text = NO_GAUGE.replace("pressure_kPa = 70.0", "")
    assert "growth.pressure_kPa is missing" in refusal(text, tmp_path)


def test_a_file_that_cannot_be_read(tmp_path):
    for path in (tmp_path / "absent.toml", tmp_path):
        with pytest.raises(ChamberFileError, match="cannot be read"):
            read_chamber(path)


def test_a_file_that_is_not_text(tmp_path):
    path = tmp_path / "bench.toml"
    path.write_bytes(b"# K\xf6lbchen\n" + GAUGE.encode())
    with pytest.raises(ChamberFileError, match=r"not a TOML file: byte 4 is not UTF-8"):
        read_chamber(path)


def test_a_byte_order_mark_and_windows_line_ends_do_no_harm(tmp_path):
    path = tmp_path / "bench.toml"
    path.write_bytes(b"\xef\xbb\xbf" + GAUGE.replace("\n", "\r\n").encode())
    assert read_chamber(path) == bench_of(GAUGE)


def test_saturation_allows_for_what_is_not_known_better():
    """At 298.15 K water has 3.1698 kPa (IAPWS-95, from memory)."""
    text = GAUGE.replace("temperature_K = 296.15", "temperature_K = 298.15")

    def stated(ratio, more=""):
        line = f"partial_pressure_kPa = {3.1698 * ratio}{more}"
        return bench_of(text.replace("mole_fraction = 0.012", line))

    assert stated(0.99).vapour.partial_pressure == pytest.approx(3138.1, rel=1e-4)
    stated(1.01)
    with pytest.raises(ChamberFileError, match="above saturation"):
        stated(1.04)
    stated(1.04, "\npartial_pressure_kPa_sigma = 0.05")
    with pytest.raises(ChamberFileError, match="above saturation"):
        stated(1.10, "\npartial_pressure_kPa_sigma = 0.05")


def test_saturation_allows_for_an_uncertain_temperature():
    text = GAUGE.replace("mole_fraction = 0.012", "dew_point_K = 297.0")
    with pytest.raises(ChamberFileError, match="above saturation"):
        bench_of(text)
    bench_of(text.replace("temperature_K = 296.15", "temperature_K = 296.15\n"
                          "temperature_K_sigma = 0.5"))


def test_vapour_is_judged_without_a_stated_pressure_where_it_can_be():
    text = GAUGE.replace("pressure_kPa = 92.0", "")
    bench_of(text.replace("mole_fraction = 0.012", "mole_fraction = 0.035"))
    with pytest.raises(ChamberFileError, match="above saturation"):
        bench_of(text.replace("mole_fraction = 0.012", "saturation_ratio = 1.1"))


# --- the table of keys --------------------------------------------------------------------------


def test_the_table_of_keys_fills_every_field_of_the_records():
    names = {"beam": "Beam", "detector": "Detector", "transmission": "Transmission",
             "reference": "Reference", "pressure": "PressureGauge", "vapour": "Vapour",
             "seed": "Seed", "background": "Background", "chamber": "Chamber",
             "growth": "GasState", "pulse": "Pulse", "analysis": "Analysis"}
    for table, record in names.items():
        wanted = {field.name for field in fields(getattr(records, record))} - {"overrides"}
        known = {key.field for key in KEYS if key.table == table and not key.property_name}
        assert known == wanted, table


def test_every_key_has_words_an_example_and_a_default_that_its_record_shares():
    defaults = {field.name: field.default for record in (
        records.Detector, records.Transmission, records.Reference, records.PressureGauge,
        records.Vapour, records.Chamber, records.Analysis) for field in fields(record)}
    for key in key_table():
        assert key.doc, key
        assert key.example, key
        assert key.unit in UNITS, key
        assert not key.unit or key.name.endswith(f"_{key.unit}") or key.kind == "polarization"
        if key.default is not None:
            assert to_si(key.default, key.unit) == defaults[key.field], key


@pytest.mark.parametrize("key", KEYS, ids=lambda key: f"{key.table}.{key.name}")
def test_every_example_is_allowed(key):
    """Each key's example, in a bench where the table may stand."""
    text = NO_GAUGE if key.table in {"growth", "pulse"} else GAUGE
    mapping = tomllib.loads(text)
    value = tomllib.loads(f"v = {key.example}")["v"]
    content = mapping.setdefault(key.table, [{}] if key.table == "detector" else {})
    content = content[0] if key.table == "detector" else content
    if key.table == "background":
        content |= {"concentration_per_cm3": 0.0, "diameter_nm": 100.0}
    if key.name in HUMIDITY:
        del content["mole_fraction"]
    if key.table == "reference":
        content["column"] = "monitor_V"
    if key.name == "beam":
        mapping["beam"]["name"] = value
    if key.table == "correlations":
        content |= {k.name: tomllib.loads(f"v = {k.example}")["v"] for k in KEYS
                    if k.table == key.table}
    content[key.name] = value
    apparatus_from_mapping(mapping)


def test_names_with_sigma_are_allowed_only_for_numbers():
    assert "angle_deg_sigma" in allowed_names("detector")
    assert "column_sigma" not in allowed_names("detector")
    assert "window_ms_sigma" not in allowed_names("analysis")
    assert {table.name for table in TABLES} == {key.table for key in KEYS}


# --- overrides ----------------------------------------------------------------------------------


def test_overrides_replace_values_and_leave_the_mapping_alone():
    mapping = tomllib.loads(GAUGE)
    changed = apply_overrides(mapping, {
        "chamber.temperature_K": 297.15,
        "detector.scatter1_V.gain_V_m": 3e5,
        "detector.scatter1_V.gain_V_m_sigma": 1e4,
        "seed.diameter_nm": 50,
        "gas.carrier": {"argon": 0.5, "helium": 0.5},
        "vapour.refractive_index": [1.34, 0.0],
    })
    bench = apparatus_from_mapping(changed)
    assert bench.chamber.temperature == 297.15
    assert bench.detectors[0].gain == 3e5
    assert bench.sigmas == {"detector.scatter1_V.gain_V_m": 1e4}
    assert bench.seed.diameter == 50e-9
    assert bench.carrier == {"argon": 0.5, "helium": 0.5}
    assert mapping == tomllib.loads(GAUGE)


def test_one_statement_of_the_vapour_takes_the_place_of_another():
    mapping = tomllib.loads(GAUGE)
    mapping["vapour"]["mole_fraction_sigma"] = 1e-4
    bench = apparatus_from_mapping(apply_overrides(mapping, {"vapour.dew_point_K": 281.0}))
    assert bench.vapour.mole_fraction is None
    assert bench.vapour.dew_point == 281.0
    assert bench.sigmas == {}


def test_gases_one_by_one():
    overrides = {"gas.carrier.argon": 0.6, "gas.carrier.helium": 0.4}
    bench = apparatus_from_mapping(apply_overrides(tomllib.loads(GAUGE), overrides))
    assert bench.carrier == {"argon": 0.6, "helium": 0.4}


@pytest.mark.parametrize(("path", "value", "expected"), [
    ("chamber.temprature_K", 297.0, "did you mean chamber.temperature_K?"),
    ("detector.scatter1_V.gain", 2e5, "did you mean detector.scatter1_V.gain_V_m?"),
    ("colour", "red", "TABLE.KEY"),
    ("detector.scatter2_V.gain_V_m", 2e5, "did you mean scatter1_V?"),
    ("detector.scatter1_V.column", "scatter2_V", "unknown key path"),
    ("chamber.temperature_K", "warm", "must be a number"),
    ("chamber.temperature_K", True, "must be a number"),
    ("chamber.temperature_K", -5.0, "at least 100"),
    ("chamber.temperature_K_sigma", -0.1, "must not be negative"),
    ("analysis.window_ms", 5.0, "[first, last]"),
])
def test_a_bad_override_names_its_origin(path, value, expected):
    with pytest.raises(ChamberFileError) as caught:
        apply_overrides(tomllib.loads(GAUGE), {path: value}, "pulse7.csv")
    message = str(caught.value)
    assert message.startswith(f"pulse7.csv: {path} = ")
    assert expected in message
    assert message.isprintable()


def test_overrides_of_a_mapping_that_is_wrong_itself_leave_the_message_to_the_check():
    changed = apply_overrides({"chamber": 5}, {"chamber.temperature_K": 297.0})
    with pytest.raises(ChamberFileError, match="chamber = 5: write it as one table"):
        apparatus_from_mapping(changed)


@pytest.mark.parametrize("path", known_paths(["a.b_V"], ["red", "2.5 um"]))
def test_every_key_path_is_understood(path):
    table, column, name = split_path(path)
    assert path == ".".join(part for part in (table, column, name) if part)


# --- properties ---------------------------------------------------------------------------------


def test_units_against_the_si():
    """Against scipy.constants, which follows CODATA and NIST SP 811."""
    expected = {"Torr": scipy.constants.torr, "bar": scipy.constants.bar,
                "deg": scipy.constants.degree, "hPa": scipy.constants.hecto,
                "kPa": scipy.constants.kilo, "nm": scipy.constants.nano,
                "mm3": scipy.constants.milli**3, "per_cm3": scipy.constants.centi**-3,
                "mm2_s": scipy.constants.milli**2, "us": scipy.constants.micro}
    for unit, size in expected.items():
        assert to_si(1.0, unit) == pytest.approx(size, rel=1e-15)
    with pytest.raises(InvalidInputError, match="'psi' is not known"):
        to_si(1.0, "psi")


@given(st.floats(-1e12, 1e12), st.sampled_from(sorted(UNITS)))
def test_units_there_and_back(value, unit):
    assert from_si(to_si(value, unit), unit) == pytest.approx(value, rel=1e-14, abs=1e-300)


@given(wavelength=st.floats(200, 2000), angle=st.floats(5, 180), sigma=st.floats(1e-6, 5))
def test_a_bench_holds_what_was_written(wavelength, angle, sigma):
    mapping = tomllib.loads(GAUGE)
    mapping["beam"]["wavelength_nm"] = wavelength
    mapping["detector"][0] |= {"angle_deg": angle, "angle_deg_sigma": sigma}
    bench = apparatus_from_mapping(mapping)
    assert from_si(bench.beam.wavelength, "nm") == pytest.approx(wavelength, rel=1e-14)
    assert math.degrees(bench.detectors[0].angle) == pytest.approx(angle, rel=1e-14)
    assert math.degrees(bench.sigmas["detector.scatter1_V.angle_deg"]) == pytest.approx(sigma)


ANYTHING = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=8),
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(st.text(max_size=8), inner,
                                                               max_size=3), max_leaves=4)


@settings(max_examples=150)
@given(path=st.sampled_from([(t.name, k.name) for t in TABLES for k in KEYS if k.table == t.name]),
       value=ANYTHING)
def test_whatever_a_file_says_is_a_bench_or_one_line(path, value):
    mapping = tomllib.loads(GAUGE)
    table, key = path
    content = mapping.setdefault(table, {})
    (content[0] if table == "detector" else content)[key] = value
    message = "a bench"
    try:
        apparatus_from_mapping(mapping)
    except ChamberFileError as error:
        message = str(error)
    assert message.isprintable()
    assert len(message) < 600


def test_nearest_finds_a_slip_and_nothing_else():
    assert nearest("Temperature_k", ["temperature_K", "pressure_kPa"]) == "temperature_K"
    assert nearest("xyz", ["temperature_K", "pressure_kPa"]) is None


# --- practice -----------------------------------------------------------------------------------


@needs_practice
def test_practice_chamber_files_are_benches():
    paths = sorted(PRACTICE.glob("*.toml"))
    assert len(paths) >= 20
    for path in paths:
        bench = read_chamber(path)
        mapping = read_chamber_mapping(path)
        assert len(bench.detectors) == len(mapping["detector"])
        assert (bench.pressure is None) == (bench.growth is not None)
        assert 0.05 < saturation_before(bench, bench.chamber.pressure) < 1
