"""Traces: what is read, and the one line for each way in which a file can be damaged."""

import hashlib
import json
import math
import os

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from shared_data import PRACTICE, REAL, needs_practice, needs_real
from test_chamber_file import GAUGE, NO_GAUGE

from scatterfit.errors import ChamberFileError, InvalidInputError, TraceError
from scatterfit.files import (
    PULSES_NAME,
    load_pulse,
    parse_assignment,
    read_trace,
    write_json,
    write_trace,
)
from scatterfit.files_text import parse_scalar

HEADER = "time_ms,scatter1_V,transmitted_V,gauge_kPa"
ROWS = tuple(f"{i - 5},{0.01 * i:g},{5 - 0.02 * i:g},{92 - i:g}" for i in range(30))


def text_of(rows=ROWS, header=HEADER, before=()):
    return "\n".join([*before, header, *rows]) + "\n"


def trace_of(tmp_path, content, name="pulse.csv"):
    path = tmp_path / name
    path.write_bytes(content if isinstance(content, bytes) else content.encode("utf-8"))
    return read_trace(path)


def refusal(tmp_path, content, error=TraceError, name="pulse.csv"):
    """Return the one line that a trace is refused with."""
    with pytest.raises(error) as caught:
        trace_of(tmp_path, content, name)
    message = str(caught.value)
    assert message.isprintable(), "one line"
    assert message.startswith(f"{tmp_path / name}: ")
    return message.removeprefix(f"{tmp_path / name}: ")


def with_row(number, row):
    """Return the clean file with another text in one of its lines, counted from 1."""
    lines = text_of().splitlines()
    lines[number - 1] = row
    return "\n".join(lines) + "\n"


# --- what is understood -------------------------------------------------------------------------


def test_a_clean_file(tmp_path):
    content = text_of()
    trace = trace_of(tmp_path, content)
    assert trace.header == ("time_ms", "scatter1_V", "transmitted_V", "gauge_kPa")
    assert list(trace.columns) == ["scatter1_V", "transmitted_V", "gauge_kPa"]
    np.testing.assert_allclose(trace.time, (np.arange(30) - 5) * 1e-3, rtol=1e-15)
    np.testing.assert_allclose(trace.columns["gauge_kPa"], 92e3 - 1e3 * np.arange(30), rtol=1e-15)
    np.testing.assert_allclose(trace.columns["scatter1_V"], 0.01 * np.arange(30), rtol=1e-15)
    assert trace.sha256 == hashlib.sha256(content.encode()).hexdigest()
    assert dict(trace.overrides) == {}
    assert trace.source == str(tmp_path / "pulse.csv")


def decimal_commas(text):
    return text.replace(",", ";").replace(".", ",")


@pytest.mark.parametrize("write", [
    lambda text: text.replace(",", "\t"),
    lambda text: text.replace(",", ";"),
    decimal_commas,
    lambda text: decimal_commas(text).replace(";", "\t"),
    lambda text: text.replace("\n", "\r\n"),
    lambda text: text.replace("\n", "\r"),
    lambda text: "\ufeff" + text,
    lambda text: text.rstrip("\n"),
    lambda text: text + "\n\n",
    lambda text: "\n" + text,
    lambda text: text.replace(",", " , "),
    lambda text: text.replace("time_ms", '"time_ms"').replace("gauge_kPa", '"gauge_kPa"'),
], ids=["tabs", "semicolons", "decimal commas", "tabs and decimal commas", "CRLF", "CR", "mark",
        "no last line end", "empty last lines", "empty first line", "spaces", "quoted names"])
def test_other_ways_to_write_the_same_numbers(write, tmp_path):
    expected = trace_of(tmp_path, text_of())
    trace = trace_of(tmp_path, write(text_of()), "other.csv")
    assert trace.header == expected.header
    np.testing.assert_array_equal(trace.time, expected.time)
    for name, values in expected.columns.items():
        np.testing.assert_array_equal(trace.columns[name], values)


@pytest.mark.parametrize(("column", "si"), [
    ("p_Pa", 2.0), ("p_hPa", 200.0), ("p_mbar", 200.0), ("p_kPa", 2e3), ("p_bar", 2e5),
    ("p_Torr", 2 * 101325 / 760), ("u_V", 2.0), ("u_mV", 2e-3),
])
def test_columns_come_in_si(column, si, tmp_path):
    content = "\n".join([f"time_s,{column}", *(f"{i},2" for i in range(20))])
    trace = trace_of(tmp_path, content)
    assert trace.columns[column] == pytest.approx(np.full(20, si), rel=1e-15)


@pytest.mark.parametrize(("column", "si"), [("time_s", 3.0), ("time_ms", 3e-3), ("time_us", 3e-6)])
def test_times_come_in_seconds(column, si, tmp_path):
    content = "\n".join([f"{column},u_V", *(f"{3 * i},1" for i in range(20))])
    assert trace_of(tmp_path, content).time[1] == pytest.approx(si, rel=1e-15)


def test_a_column_without_a_unit_is_named_but_not_taken(tmp_path):
    content = "\n".join(["time_s,u_V,marker", *(f"{i},1,{i % 2}" for i in range(20))])
    trace = trace_of(tmp_path, content)
    assert trace.header == ("time_s", "u_V", "marker")
    assert list(trace.columns) == ["u_V"]


def test_uneven_sampling_is_used_as_it_is(tmp_path):
    times = np.cumsum(np.linspace(0.1, 3.0, 25))
    content = "\n".join(["time_ms,u_V", *(f"{t:.12g},1" for t in times)])
    np.testing.assert_allclose(trace_of(tmp_path, content).time, times * 1e-3, rtol=1e-9)


@pytest.mark.parametrize("cell", ["", " ", "nan", "NaN", "inf", "-inf", "Infinity", '""'])
@pytest.mark.parametrize("column", [1, 2, 3])
def test_cells_without_a_finite_number_are_nan(cell, column, tmp_path):
    cells = ROWS[7].split(",")
    cells[column] = cell
    trace = trace_of(tmp_path, with_row(9, ",".join(cells)))
    for number, values in enumerate(trace.columns.values(), start=1):
        assert np.flatnonzero(np.isnan(values)).tolist() == ([7] if number == column else [])


def test_empty_cells_side_by_side_and_at_the_end(tmp_path):
    trace = trace_of(tmp_path, with_row(31, "24,,,"))
    assert [np.isnan(values).sum() for values in trace.columns.values()] == [1, 1, 1]
    assert trace.time[29] == 24e-3


def test_lines_before_the_header_may_set_values(tmp_path):
    before = ["# pulse 7, Monday", "#chamber.temperature_K=297.15  # by hand",
              "# detector.scatter1_V.gain_V_m = 2e5", '# vapour.substance = "water"',
              "# gas.carrier = helium", "# vapour.refractive_index = [1.34, 0.0]",
              "# seed.diameter_nm_sigma = 2", "# operator = somebody", "# chamber.colour = red"]
    trace = trace_of(tmp_path, text_of(before=before))
    assert trace.overrides == {
        "chamber.temperature_K": 297.15, "detector.scatter1_V.gain_V_m": 2e5,
        "vapour.substance": "water", "gas.carrier": "helium",
        "vapour.refractive_index": [1.34, 0.0], "seed.diameter_nm_sigma": 2.0}
    assert trace.comments == ("pulse 7, Monday", "operator = somebody", "chamber.colour = red")


def test_values_before_the_header_with_decimal_commas(tmp_path):
    content = decimal_commas(text_of())
    trace = trace_of(tmp_path, "# chamber.temperature_K = 297,15\n" + content)
    assert trace.overrides == {"chamber.temperature_K": 297.15}


# --- damage -------------------------------------------------------------------------------------

DAMAGED = {
    "empty": ("", ["the file is empty"]),
    "blank": (" \n\n", ["the file is empty"]),
    "only comments": ("# a\n# b\n", ["no header"]),
    "only a header": (HEADER + "\n", ["no data rows"]),
    "no header": ("\n".join(ROWS), ["row 1", "header"]),
    "header commented out": (text_of(header="# " + HEADER), ["row 2", "header", "comment"]),
    "no time": (text_of(header="t,scatter1_V,transmitted_V,gauge_kPa"),
                ["row 1", "no time column", "time_s, time_ms, time_us",
                 "t, scatter1_V, transmitted_V, gauge_kPa"]),
    "two times": (text_of(header="time_ms,time_s,transmitted_V,gauge_kPa"),
                  ["row 1", "time_ms and time_s both give the time"]),
    "separated by spaces": (text_of().replace(",", " "),
                            ["no time column", "separated by comma, tab or semicolon"]),
    "column twice": (text_of(header="time_ms,scatter1_V,scatter1_V,gauge_kPa"),
                     ["row 1", "column scatter1_V is there twice"]),
    "column without a name": (text_of(header="time_ms,scatter1_V,,gauge_kPa"),
                              ["row 1", "column 3 of the header has no name"]),
    "row too short": (with_row(12, "5,0.1,4.8"),
                      ["row 12", "3 cells", "4 columns", "time_ms, scatter1_V", "not repaired"]),
    "row too long": (with_row(12, "5,0.1,4.8,82,1"), ["row 12", "5 cells", "4 columns"]),
    "short and long": (with_row(12, "5,0.1,4.8").replace("6,0.11,", "6,0.11,0,"),
                       ["row 12", "3 cells"]),
    "last row cut": (text_of()[:-8], ["row 31", "3 cells"]),
    "empty row": (with_row(12, ""), ["row 12", "no cells"]),
    "empty first row": (with_row(2, ""), ["row 2", "no cells"]),
    "comment below the header": (with_row(12, "# laser off"), ["row 12", "1 cell,"]),
    "not a number": (with_row(20, "13,0.18,4.6x,74"),
                     ["row 20, column transmitted_V", '"4.6x" is not a number', "not repaired"]),
    "word for missing": (with_row(20, "13,0.18,n/a,74"),
                         ["row 20, column transmitted_V", '"n/a" is not a number']),
    "underscore": (with_row(20, "13,0.18,4_6,74"), ["row 20, column transmitted_V", '"4_6"']),
    "other digits": (with_row(20, "13,0.18,４,74"), ["row 20, column transmitted_V"]),
    "hexadecimal": (with_row(20, "13,0.18,0x4,74"), ["row 20, column transmitted_V", '"0x4"']),
    "number in a column without a unit": (
        text_of(header="time_ms,scatter1_V,note,gauge_kPa").replace("4.6,", "ok,"),
        ["row 22, column note", '"ok" is not a number']),
    "second line of units": (with_row(2, "ms,V,V,kPa"), ["row 2, column time_ms", '"ms"']),
    "thousands": (decimal_commas(text_of()).replace("5;0,1;", "5;1.000,1;"),
                  ["row 12, column scatter1_V", '"1.000,1"']),
    "both decimal marks": (decimal_commas(text_of()).replace("5;0,1;", "5;0.1;"),
                           ["row 12, column scatter1_V", "decimal commas"]),
    "time missing": (with_row(12, ",0.1,4.8,82"), ["row 12, column time_ms", "without a time"]),
    "time infinite": (with_row(12, "inf,0.1,4.8,82"), ["row 12, column time_ms"]),
    "time stands still": (with_row(12, "4,0.1,4.8,82"),
                          ["row 12, column time_ms", "stands still at 4"]),
    "time runs backwards": (with_row(12, "3.5,0.1,4.8,82"),
                            ["row 12, column time_ms", "runs backwards from 4 to 3.5"]),
    "too few samples": (text_of(ROWS[:19]), ["19 samples", "at least 20"]),
    "Latin-1": (text_of(before=["# Kölbchen"]).encode("latin-1"),
                ["row 1", "not UTF-8 text", "0xf6"]),
    "Latin-1 further down": (with_row(20, "13,0.18,4.6µ,74").encode("latin-1"),
                             ["row 20", "not UTF-8 text"]),
    "UTF-16": (text_of().encode("utf-16"), ["not text", "zero bytes"]),
    "binary": (b"\x89HDF\r\n\x1a\n" + bytes(100), ["not text"]),
}


@pytest.mark.parametrize("name", DAMAGED)
def test_a_damaged_file_gets_one_line(name, tmp_path):
    content, expected = DAMAGED[name]
    message = refusal(tmp_path, content)
    for part in expected:
        assert part in message


def test_rows_are_counted_in_the_file_and_not_from_the_header(tmp_path):
    message = refusal(tmp_path, "# one\n\n# two\n" + with_row(12, "4,0.1,4.8,82"))
    assert message.startswith("row 15, column time_ms")


def test_a_long_header_is_cut_in_messages(tmp_path):
    header = ",".join(["t", *(f"channel{i}_V" for i in range(200))])
    assert len(refusal(tmp_path, header + "\n1,2\n")) < 400


def test_a_file_that_cannot_be_read(tmp_path):
    for path in (tmp_path / "absent.csv", tmp_path):
        with pytest.raises(TraceError, match="cannot be read"):
            read_trace(path)


@pytest.mark.parametrize(("line", "expected"), [
    ("# chamber.temperature_K = warm", 'chamber.temperature_K = "warm": must be a number'),
    ("# chamber.temperature_K = 24.0", "chamber.temperature_K = 24.0: must be at least 100"),
    ("# chamber.temperature_K = 297,15", 'chamber.temperature_K = "297,15": must be a number'),
    ("# chamber.temperature_K =", 'chamber.temperature_K = "": must be a number'),
    ("# beam.polarization = paralel", 'did you mean "parallel"?'),
    ("# detector.scatter1_V.angle_deg_sigma = -1", "must not be negative"),
])
def test_a_bad_value_before_the_header_is_the_chamber_files_error(line, expected, tmp_path):
    message = refusal(tmp_path, text_of(before=["# pulse", line]), ChamberFileError)
    assert message.startswith("row 2: ")
    assert expected in message


def test_a_value_set_twice_before_the_header(tmp_path):
    lines = ["# chamber.temperature_K = 297", "# chamber.temperature_K = 298"]
    message = refusal(tmp_path, text_of(before=lines), ChamberFileError)
    assert message == 'row 2: chamber.temperature_K = "298": is set twice in this file'


# --- a pulse with its chamber file ---------------------------------------------------------------


@pytest.fixture
def night(tmp_path):
    """Return a folder with a chamber file and a trace."""
    (tmp_path / "bench.toml").write_text(GAUGE, encoding="utf-8")
    (tmp_path / "pulse.csv").write_text(text_of(), encoding="utf-8")
    return tmp_path


def load(folder, overrides=None):
    return load_pulse(folder / "bench.toml", folder / "pulse.csv", overrides)


def test_a_pulse_without_values_of_its_own(night):
    bench, trace, used = load(night)
    assert bench.chamber.temperature == 296.15
    assert trace.time.size == 30
    assert used == {}


def test_the_later_source_wins(night):
    (night / "pulse.csv").write_text(text_of(before=[
        "# chamber.path_mm = 3.0", "# detector.scatter1_V.gain_V_m = 3.0"]), encoding="utf-8")
    (night / PULSES_NAME).write_text(
        "trace,chamber.temperature_K,chamber.path_mm,detector.scatter1_V.gain_V_m,remark\n"
        "other.csv,250,9,9,\npulse.csv,290,2,2,windy\n", encoding="utf-8")
    bench, _, used = load(night, {"detector.scatter1_V.gain_V_m": 4.0})
    assert used == {"chamber.temperature_K": 290.0, "chamber.path_mm": 3.0,
                    "detector.scatter1_V.gain_V_m": 4.0}
    assert bench.chamber.temperature == 290.0
    assert bench.chamber.path == 3e-3
    assert bench.detectors[0].gain == 4.0


def test_the_vapour_stated_anew_in_each_source(night):
    (night / PULSES_NAME).write_text("trace,vapour.mole_fraction,vapour.mole_fraction_sigma\n"
                                     "pulse,0.01,0.001\n", encoding="utf-8")
    bench, _, used = load(night, {"vapour.dew_point_K": 281})
    assert used == {"vapour.dew_point_K": 281}
    assert bench.vapour.dew_point == 281.0
    assert bench.sigmas == {}


@pytest.mark.parametrize("text", [
    "trace;chamber.temperature_K\npulse.csv;290,5\n",
    "trace\tchamber.temperature_K\npulse.csv\t290.5\n",
    "\ufeff# values by hand\ntrace,chamber.temperature_K\r\n\r\npulse.csv,290.5\r\n",
    'trace,gas.carrier,chamber.temperature_K\n"pulse.csv","argon","290.5"\n',
    "trace,chamber.temperature_K\npulse,290.5\n",
])
def test_ways_to_write_pulses_csv(text, night):
    (night / PULSES_NAME).write_bytes(text.encode())
    assert load(night)[0].chamber.temperature == 290.5


def test_a_pulse_that_pulses_csv_does_not_know_and_an_empty_cell(night):
    (night / PULSES_NAME).write_text("trace,chamber.temperature_K\nother.csv,290\npulse.csv,\n",
                                     encoding="utf-8")
    assert load(night)[2] == {}


def test_pulses_csv_of_a_folder_above_counts_less_than_the_nearest(tmp_path):
    night = tmp_path / "night"
    night.mkdir()
    (night / "bench.toml").write_text(GAUGE, encoding="utf-8")
    (night / "pulse.csv").write_text(text_of(), encoding="utf-8")
    header = "trace,chamber.temperature_K,chamber.path_mm\n"
    (tmp_path / PULSES_NAME).write_text(header + "pulse.csv,280,1\nnight/pulse.csv,290,2\n",
                                        encoding="utf-8")
    (night / PULSES_NAME).write_text(header + "pulse,,3\n", encoding="utf-8")
    assert load(night)[2] == {"chamber.path_mm": 3.0}
    _, _, used = load_pulse(night / "bench.toml", night / "pulse.csv", folder=tmp_path)
    assert used == {"chamber.temperature_K": 290.0, "chamber.path_mm": 3.0}


def test_pulses_csv_is_read_again_when_it_changes(night):
    path = night / PULSES_NAME
    for number, temperature in enumerate((290.0, 291.0)):
        path.write_text(f"trace,chamber.temperature_K\npulse.csv,{temperature}\n",
                        encoding="utf-8")
        os.utime(path, (number + 1, number + 1))
        assert load(night)[0].chamber.temperature == temperature


@pytest.mark.parametrize(("text", "expected"), [
    ("name,chamber.temperature_K\n", 'row 1: the first column must be "trace", it is "name"'),
    ("trace,chamber.temprature_K\n", "row 1: column chamber.temprature_K: unknown key path; "
                                     "did you mean chamber.temperature_K?"),
    ("trace,detector.scatter1_V.gain\n", "did you mean detector.scatter1_V.gain_V_m?"),
    ("trace,temperature_K\n", "did you mean chamber.temperature_K?"),
    ("trace,chamber.path_mm,chamber.path_mm\n", "row 1: column chamber.path_mm is there twice"),
    ("trace,chamber.path_mm\npulse.csv,1,2\n", "row 2: 3 cells, the header has 2"),
    ("trace,chamber.path_mm\na.csv,1\na.csv,2\n", "row 3: trace a.csv is there twice"),
    ("trace,chamber.path_mm\npulse.csv,long\n", 'chamber.path_mm = "long": must be a number'),
    ("trace,detector.b_V.gain_V_m\npulse.csv,1\n", "no detector fills column b_V"),
    ("trace,remark\npulse.csv,K\xf6lbchen\n".encode("latin-1"), "not UTF-8 text"),
])
def test_a_bad_pulses_csv_is_the_chamber_files_error(text, expected, night):
    (night / PULSES_NAME).write_bytes(text if isinstance(text, bytes) else text.encode())
    with pytest.raises(ChamberFileError) as caught:
        load(night)
    message = str(caught.value)
    assert message.startswith(f"{night / PULSES_NAME}: ")
    assert expected in message
    assert message.isprintable()


@pytest.mark.parametrize(("header", "expected"), [
    ("time_ms,scatter_V,transmitted_V,gauge_kPa",
     ["no column scatter1_V", "detector.scatter1_V.column", "did you mean scatter_V?",
      "the columns are time_ms, scatter_V, transmitted_V, gauge_kPa"]),
    ("time_ms,scatter1_V,transmitted_mV,gauge_kPa",
     ["no column transmitted_V", "transmission.column", "did you mean transmitted_mV?"]),
    ("time_ms,scatter1_V,transmitted_V,p", ["no column gauge_kPa", "pressure.column"]),
])
def test_a_column_that_the_trace_lacks(header, expected, night):
    (night / "pulse.csv").write_text(text_of(header=header), encoding="utf-8")
    with pytest.raises(TraceError) as caught:
        load(night)
    for part in expected:
        assert part in str(caught.value)


def test_a_column_with_next_to_nothing_in_it(night):
    rows = [row.replace(f",{0.01 * i:g},", ",,") if i > 10 else row for i, row in enumerate(ROWS)]
    (night / "pulse.csv").write_text(text_of(rows), encoding="utf-8")
    with pytest.raises(TraceError, match="column scatter1_V: 11 usable samples, at least 20"):
        load(night)


def test_an_override_that_does_not_fit_the_bench_names_where_it_came_from(night):
    with pytest.raises(ChamberFileError, match=r"bench.toml with --set: vapour.mole_fraction = "):
        load(night, {"vapour.mole_fraction": 0.05})
    with pytest.raises(ChamberFileError, match=r"^--set: chamber.temperature_K = 20: must be"):
        load(night, {"chamber.temperature_K": 20})


def test_vapour_above_saturation_at_the_start_of_the_pressure_trace(night):
    text = GAUGE.replace("pressure_kPa = 92.0", "").replace("0.012", "0.036")
    (night / "bench.toml").write_text(text, encoding="utf-8")
    with pytest.raises(ChamberFileError, match="above saturation"):
        load(night)
    (night / "bench.toml").write_text(text.replace("0.036", "0.033"), encoding="utf-8")
    load(night)


def test_a_bench_without_a_gauge_reads_a_trace_with_one(night):
    (night / "bench.toml").write_text(NO_GAUGE, encoding="utf-8")
    bench, trace, _ = load(night)
    assert bench.pressure is None
    assert "gauge_kPa" in trace.columns


def test_a_chamber_file_that_is_wrong_is_said_before_the_trace_is_looked_at(night):
    (night / "bench.toml").write_text("[beam]\n", encoding="utf-8")
    (night / "pulse.csv").write_text("", encoding="utf-8")
    with pytest.raises(ChamberFileError):
        load(night)


# --- values written as text ----------------------------------------------------------------------


@pytest.mark.parametrize(("text", "value"), [
    ("297", 297.0), (" 2e5 ", 2e5), (".5", 0.5), ("5.", 5.0), ("-1 # note", -1.0),
    ("true", True), ('"7732-18-5"', "7732-18-5"), ("7732-18-5", "7732-18-5"),
    ("1-propanol", "1-propanol"), ("[1, 2.5]", [1, 2.5]), ("{argon = 0.5}", {"argon": 0.5}),
    ("1_000", 1000), ("", ""), ("[1, 2", "[1, 2"), ("heavy water # D2O", "heavy water"),
])
def test_values_written_as_text(text, value):
    assert parse_scalar(text) == value


@pytest.mark.parametrize("text", ["", "chamber.path_mm", "=3", "chamber.path_mm="])
def test_an_assignment_needs_both_sides(text):
    with pytest.raises(ChamberFileError, match="KEY=VALUE"):
        parse_assignment(text)


# --- writing -------------------------------------------------------------------------------------

READINGS = st.floats(-1e4, 1e4) | st.just(math.nan)


@settings(max_examples=60, deadline=None)
@given(data=st.data(), start=st.floats(-10, 10),
       steps=st.lists(st.floats(1e-7, 1e-2), min_size=20, max_size=40))
def test_what_is_written_reads_back(tmp_path_factory, data, start, steps):
    """To the digits that `write_trace` promises: 12 of the time, 9 of a reading."""
    time = start + np.cumsum(steps)
    columns = {name: np.array(data.draw(st.lists(READINGS, min_size=time.size,
                                                 max_size=time.size)))
               for name in ("a_V", "b_mV", "p_hPa")}
    path = tmp_path_factory.mktemp("written") / "pulse.csv"
    write_trace(path, time, columns, comments=["chamber.temperature_K = 290.5", "two\nlines"])
    trace = read_trace(path)
    np.testing.assert_allclose(trace.time, time, rtol=1e-11)
    assert list(trace.columns) == list(columns)
    for name, values in columns.items():
        np.testing.assert_allclose(trace.columns[name], values, rtol=1e-8, atol=1e-300)
    assert trace.overrides == {"chamber.temperature_K": 290.5}
    assert trace.comments == ("two lines",)


def test_what_cannot_be_written_is_refused(tmp_path):
    time = np.arange(20.0)
    for name, values in (("p_psi", time), ("a,b_V", time), ("a_V", time[1:])):
        with pytest.raises(InvalidInputError, match="column"):
            write_trace(tmp_path / "pulse.csv", time, {name: values})
    assert list(tmp_path.iterdir()) == []


def test_json_is_written_whole_or_not_at_all(tmp_path):
    path = tmp_path / "result.json"
    write_json(path, {"a": np.float64(1.5), "n": np.int64(3), "list": np.arange(2), "ä": None})
    assert json.loads(path.read_text(encoding="utf-8")) == {
        "a": 1.5, "n": 3, "list": [0, 1], "ä": None}
    for bad in (math.nan, np.inf, np.array([1.0, np.nan])):
        with pytest.raises(InvalidInputError, match=r"result\.json: not written"):
            write_json(path, {"a": {"b": bad}})
    with pytest.raises(TypeError, match="Path cannot be written as JSON"):
        write_json(path, {"a": path})
    assert json.loads(path.read_text(encoding="utf-8"))["n"] == 3
    assert list(tmp_path.iterdir()) == [path]


def test_nothing_is_left_behind_where_writing_fails(tmp_path):
    place = tmp_path / "result.json"
    place.mkdir()
    with pytest.raises(OSError, match=r"result\.json"):
        write_json(place, {"a": 1})
    assert list(tmp_path.iterdir()) == [place]


# --- any file at all ------------------------------------------------------------------------------


@settings(max_examples=150, deadline=None)
@given(data=st.data())
def test_any_damage_ends_in_a_trace_or_one_line(tmp_path_factory, data):
    """One place of a clean file is replaced by anything: it is read or refused, never repaired."""
    clean = text_of().encode()
    start = data.draw(st.integers(0, len(clean)))
    end = data.draw(st.integers(start, min(start + 20, len(clean))))
    content = clean[:start] + data.draw(st.binary(max_size=12)) + clean[end:]
    path = tmp_path_factory.mktemp("any") / "pulse.csv"
    path.write_bytes(content)
    message = "a trace"
    try:
        trace = read_trace(path)
    except (TraceError, ChamberFileError) as error:
        message = str(error)
    else:
        assert np.all(np.diff(trace.time) > 0)
        assert all(values.shape == trace.time.shape for values in trace.columns.values())
    assert message.isprintable()


# --- shared recordings ----------------------------------------------------------------------------


@needs_practice
def test_practice_pulses_against_an_independent_reader():
    """Every number as NumPy's own genfromtxt reads it."""
    paths = sorted(PRACTICE.glob("*.csv"))
    assert len(paths) >= 20
    for path in paths[::4]:
        _, trace, _ = load_pulse(path.with_suffix(".toml"), path)
        table = np.genfromtxt(path, delimiter=",", names=True)
        np.testing.assert_array_equal(trace.time, table["time_ms"] / 1e3)
        assert trace.header == table.dtype.names
        for name in trace.columns:
            size = 1e3 if name.endswith("_kPa") else 1.0
            np.testing.assert_array_equal(trace.columns[name], table[name] * size)


@needs_practice
def test_all_practice_pulses_are_read():
    for path in sorted(PRACTICE.glob("*.csv")):
        bench, trace, used = load_pulse(path.with_suffix(".toml"), path)
        assert used == {}
        assert trace.time.size > 500
        assert all(detector.column in trace.columns for detector in bench.detectors)
        if bench.pressure is not None:
            start = np.median(trace.columns[bench.pressure.column][:50])
            assert start == pytest.approx(bench.chamber.pressure, rel=1e-3)


@needs_real
def test_real_recordings_are_read():
    """10 kHz from 0.3 s before to 1.5 s after the steepest pressure fall."""
    paths = sorted(REAL.glob("*.csv"))
    assert paths
    for path in paths:
        trace = read_trace(path)
        assert set(trace.columns) == {"transmitted_V", "pressure_kPa"}
        assert trace.time[0] == pytest.approx(-0.3, abs=1e-3)
        assert trace.time[-1] == pytest.approx(1.5, abs=1e-3)
        np.testing.assert_allclose(np.diff(trace.time), 1e-4, rtol=1e-6)
        assert 9e4 < trace.columns["pressure_kPa"].min() < 1.1e5
