"""Traces in HDF5 and netCDF-4; tables as CSV, Parquet and netCDF for other programs."""

import csv
import json
import sys
from contextlib import closing
from dataclasses import replace
from datetime import datetime

import night_fits
import numpy as np
import pytest
from night_fits import make_folder

from scatterfit.cli import main
from scatterfit.errors import ChamberFileError, TraceError
from scatterfit.files import load_pulse, read_trace
from scatterfit.files_export import ExportError, write_table
from scatterfit.overnight.columns import NUMBERS
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.results import open_results
from scatterfit.overnight.work import measure

h5py = pytest.importorskip("h5py", reason="h5py is not installed (extra formats)")
h5netcdf = pytest.importorskip("h5netcdf", reason="h5netcdf is not installed (extra formats)")

TIME = np.arange(50) * 0.02
COLUMNS = {"time_ms": TIME, "scatter1_mV": np.sin(TIME), "transmitted_V": 5 - TIME,
           "pressure_hPa": 800.0 + TIME}


def write_hdf5(path, columns=None, **attributes):
    with h5py.File(path, "w") as file:
        for name, values in (COLUMNS if columns is None else columns).items():
            file[name] = values
        file.attrs.update(attributes)
    return path


def write_csv(path):
    rows = zip(*COLUMNS.values(), strict=True)
    path.write_text("\n".join([",".join(COLUMNS), *(",".join(map(repr, map(float, row)))
                                                    for row in rows)]), encoding="utf-8")
    return path


def refusal(path):
    with pytest.raises(TraceError) as error:
        read_trace(path)
    assert "\n" not in str(error.value)
    assert str(error.value).startswith(f"{path}: ")
    return str(error.value)


# Traces


def same(one, other):
    np.testing.assert_array_equal(one.time, other.time)
    assert one.columns.keys() == other.columns.keys()
    for name, values in one.columns.items():
        np.testing.assert_array_equal(values, other.columns[name])


@pytest.mark.parametrize("ending", [".h5", ".hdf5", ".H5"])
def test_an_hdf5_trace_is_the_same_as_its_text(tmp_path, ending):
    text = read_trace(write_csv(tmp_path / "a.csv"))
    same(read_trace(write_hdf5(tmp_path / f"a{ending}")), text)


def test_a_netcdf_trace_is_the_same_as_its_text(tmp_path):
    """Written by Unidata's own C library where it is there, else by h5netcdf."""
    path = tmp_path / "a.nc"
    try:
        import netCDF4
    except ImportError:
        with h5netcdf.File(path, "w") as file:
            file.dimensions = {"sample": 50}
            for name, values in COLUMNS.items():
                file.create_variable(name, ("sample",), "f8", data=values)
            file.attrs["chamber.temperature_K"] = 296.5
    else:
        with netCDF4.Dataset(path, "w") as file:
            file.createDimension("sample", None)
            for name, values in COLUMNS.items():
                file.createVariable(name, "f8", ("sample",))[:] = values
            file.setncattr("chamber.temperature_K", 296.5)
    trace = read_trace(path)
    same(trace, read_trace(write_csv(tmp_path / "a.csv")))
    assert trace.overrides == {"chamber.temperature_K": 296.5}


def test_attributes_are_overrides_or_comments(tmp_path):
    path = write_hdf5(tmp_path / "a.h5", operator="ann", **{
        "chamber.temperature_K": np.float32(296.5), "chamber.pressure_kPa": 80,
        "vapour.substance": "water", "analysis.window_ms": [0.1, 0.9],
        "detector.scatter1_mV.gain_V_m": np.array([2e5])})
    trace = read_trace(path)
    assert trace.overrides == {
        "chamber.temperature_K": 296.5, "chamber.pressure_kPa": 80.0, "vapour.substance": "water",
        "analysis.window_ms": [0.1, 0.9], "detector.scatter1_mV.gain_V_m": 2e5}
    assert trace.comments == ("operator = ann",)


def test_an_attribute_that_no_bench_could_have_is_refused(tmp_path):
    path = write_hdf5(tmp_path / "a.h5", **{"chamber.temperature_K": 5.0})
    with pytest.raises(ChamberFileError, match=r"attribute.*chamber.temperature_K = 5.0.*100"):
        read_trace(path)


def test_packed_numbers_and_gaps_are_understood_as_cf_writes_them(tmp_path):
    path = write_hdf5(tmp_path / "a.h5", COLUMNS | {
        "scatter1_mV": np.arange(50, dtype="i2"), "transmitted_V": np.full(50, -999.0)})
    with h5py.File(path, "a") as file:
        file["scatter1_mV"].attrs.update({"scale_factor": 0.5, "add_offset": 1.0, "units": "mV",
                                          "_FillValue": np.int16(7)})
        file["transmitted_V"][:10] = 5.0
        file["transmitted_V"].attrs["missing_value"] = -999.0
    trace = read_trace(path)
    expected = (np.arange(50) * 0.5 + 1.0) / 1e3
    expected[7] = np.nan
    np.testing.assert_allclose(trace.columns["scatter1_mV"], expected)
    assert np.isfinite(trace.columns["transmitted_V"]).sum() == 10


def test_a_pulse_in_hdf5_is_loaded_with_its_bench(tmp_path):
    bench = tmp_path / "bench.toml"
    assert main(["new", str(bench)]) == 0
    columns = {"time_ms": TIME, "scatter1_V": np.sin(TIME), "transmitted_V": 5 - TIME,
               "pressure_kPa": 80.0 + TIME}
    path = write_hdf5(tmp_path / "a.h5", columns, **{"chamber.temperature_K": 297.5})
    apparatus, trace, used = load_pulse(bench, path)
    assert apparatus.chamber.temperature == 297.5
    assert used == {"chamber.temperature_K": 297.5}
    assert len(trace.sha256) == 64


TIMES = COLUMNS["time_ms"]


@pytest.mark.parametrize(("changes", "words"), [
    ({"time_ms": None}, "there is no time column; exactly one data set of time_s"),
    ({"time_s": TIMES}, "time_s and time_ms both give the time"),
    ({"time_ms": TIMES[:10], "scatter1_mV": TIMES[:10]}, "10 samples, at least 20 are needed"),
    ({"time_ms": TIMES[::-1]}, "sample 2, data set time_ms: time runs backwards from 0.98 to 0.96"),
    ({"time_ms": np.where(TIMES > 0.5, 0.5, TIMES)}, "time stands still at 0.5"),
    ({"time_ms": np.where(TIMES == 0.2, np.nan, TIMES)}, "sample 11, data set time_ms: a sample "
                                                         "without a time"),
    ({"scatter1_mV": TIMES[:30]}, "data set scatter1_mV: 30 samples, the times are 50"),
    ({"scatter1_mV": np.ones((50, 2))}, "data set scatter1_mV: shape (50, 2), one number a sample"),
])
def test_a_damaged_trace_is_refused_and_says_where(tmp_path, changes, words):
    columns = {name: values for name, values in (COLUMNS | changes).items() if values is not None}
    assert words in refusal(write_hdf5(tmp_path / "a.h5", columns))


def test_a_unit_that_disagrees_with_the_name_is_refused(tmp_path):
    path = write_hdf5(tmp_path / "a.h5")
    with h5py.File(path, "a") as file:
        file["scatter1_mV"].attrs["units"] = "V"
    assert "its name says mV and its attribute units says V" in refusal(path)


def test_columns_of_other_kinds_are_passed_over(tmp_path):
    path = write_hdf5(tmp_path / "a.h5", COLUMNS | {"note": "text", "flags": np.ones(50, bool)})
    with h5py.File(path, "a") as file:
        file.create_group("more")["scatter9_V"] = TIME
        file["dangling"] = h5py.SoftLink("/nowhere")
    trace = read_trace(path)
    assert set(trace.columns) == set(COLUMNS) - {"time_ms"}
    assert {"note", "flags", "more", "dangling"} <= set(trace.header)


@pytest.mark.parametrize(("content", "words"), [
    (b"", "the file is empty"), (b"time_ms,a_V\n0,1\n", "cannot be read as HDF5"),
    (b"\x89HDF\r\n\x1a\n" + b"\0" * 100, "cannot be read as HDF5"),
    (b"CDF\x01" + b"\0" * 60, "a classic netCDF file; convert it to netCDF-4"),
])
def test_files_of_another_kind_are_refused(tmp_path, content, words):
    path = tmp_path / "a.nc"
    path.write_bytes(content)
    assert words in refusal(path)
    assert "cannot be read" in refusal(tmp_path / "absent.h5")


def test_mutated_files_are_refused_or_read_and_never_a_surprise(tmp_path):
    rng = np.random.default_rng(5)
    good = write_hdf5(tmp_path / "good.h5", **{"chamber.temperature_K": 296.5}).read_bytes()
    messages = []
    for index in range(60):
        content = bytearray(good)
        for _ in range(int(rng.integers(1, 6))):
            content[int(rng.integers(len(content)))] = rng.integers(256)
        if index % 3 == 0:
            del content[int(rng.integers(len(content))) :]
        path = tmp_path / "m.h5"
        path.write_bytes(content)
        try:
            read_trace(path)
        except (TraceError, ChamberFileError) as error:
            messages.append(str(error))
    assert len(messages) >= 20  # those cut short at least
    assert not any("\n" in message for message in messages)


def test_a_missing_library_is_one_line(tmp_path, monkeypatch):
    path = write_hdf5(tmp_path / "a.h5")
    monkeypatch.setitem(sys.modules, "h5py", None)
    assert "HDF5 traces need h5py: pip install 'scatterfit[formats]'" in refusal(path)


# Tables


@pytest.fixture(scope="module")
def ledger(tmp_path_factory):
    plan = replace(make_folder(tmp_path_factory.mktemp("tables"), 20), fit=night_fits.mixed)
    path = plan.folder.parent / "night.sqlite"
    with closing(Ledger(path)) as opened:
        opened.remember(version="0.1.0", folder="night")
        with opened.writing():
            for index in range(20):
                opened.put(Job(f"p{index:03d}.csv"), "new")
        overrides = {"chamber.temperature_K": 296.5, "vapour.substance": "water"}
        plan = replace(plan, overrides=overrides)
        opened.store([measure(plan, job) for job in opened.claim(20)])
        opened.exclude("p005.csv", "ann", 'a "note", with\ttabs')
    return path


@pytest.fixture(scope="module")
def rows(ledger):
    return list(open_results(ledger, excluded=True).rows())


def export(ledger, path, capsys):
    assert main(["export", str(ledger), str(path)]) == 0
    assert capsys.readouterr().err == f"wrote {path}: 20 rows\n"
    return path


def test_csv_has_every_number_at_full_precision(ledger, rows, tmp_path, capsys):
    path = export(ledger, tmp_path / "night.csv", capsys)
    with path.open(encoding="utf-8", newline="") as file:
        found = list(csv.DictReader(file))
    assert len(found) == 20
    for row, cells in zip(rows, found, strict=True):
        assert list(row) == list(cells)
        for name, value in row.items():
            if value is None:
                assert cells[name] == ""
            elif isinstance(value, float):
                assert float(cells[name]) == value
            else:
                assert cells[name] == str(value)
    assert found[5]["excluded_note"] == 'a "note", with\ttabs'
    assert found[4]["chamber.temperature_K"] == "296.5"
    assert found[3]["reasons"] == "no-cloud"
    assert not list(tmp_path.glob(".*"))


def test_parquet_has_types_units_and_meanings(ledger, rows, tmp_path, capsys):
    parquet = pytest.importorskip("pyarrow.parquet", reason="pyarrow is not installed")
    table = parquet.read_table(export(ledger, tmp_path / "night.parquet", capsys))
    assert table.column_names == list(rows[0])
    for name, (unit, meaning) in NUMBERS.items():
        field = table.schema.field(name)
        assert str(field.type) == "double"
        assert field.metadata == {b"unit": unit.encode(), b"meaning": meaning.encode()}
        assert table[name].to_pylist() == [row[name] for row in rows]
    assert table["trace"].to_pylist() == [row["trace"] for row in rows]
    assert table["excluded"].to_pylist()[5] == 1
    assert table.schema.field("chamber.temperature_K").metadata[b"unit"] == b"K"
    assert table["vapour.substance"].to_pylist()[4] == "water"


def test_netcdf_has_units_uncertainties_and_time_as_cf_asks(ledger, rows, tmp_path, capsys):
    path = export(ledger, tmp_path / "night.nc", capsys)
    with h5netcdf.File(path) as file:
        assert file.attrs["Conventions"] == "CF-1.11"
        assert file.dimensions["pulse"].size == 20
        for name, (unit, meaning) in NUMBERS.items():
            variable = file.variables[name]
            assert (variable.attrs["units"], variable.attrs["long_name"]) == (unit, meaning)
            expected = [np.nan if row[name] is None else row[name] for row in rows]
            np.testing.assert_array_equal(variable[:], expected)
        number = file.variables["concentration_per_cm3"].attrs
        assert number["ancillary_variables"].split() == [
            "concentration_per_cm3_sigma", "concentration_per_cm3_sigma_statistical",
            "concentration_per_cm3_sigma_systematic"]
        assert [text.decode() if isinstance(text, bytes) else text
                for text in file.variables["verdict"][:]] == [row["verdict"] for row in rows]
        assert file.variables["excluded"][:].sum() == 1
        assert file.variables["chamber_temperature_K"].attrs["units"] == "K"
        assert all(name.replace("_", "a").isalnum() for name in file.variables)


def test_netcdf_is_read_by_the_reference_library(ledger, rows, tmp_path, capsys):
    netcdf4 = pytest.importorskip("netCDF4", reason="netCDF4 is not installed")
    path = export(ledger, tmp_path / "night.nc", capsys)
    with netcdf4.Dataset(path) as file:
        radius = file["final_radius_um"][:]
        assert radius.mask.sum() == sum(row["final_radius_um"] is None for row in rows)
        assert list(file["trace"][:]) == [row["trace"] for row in rows]
        time = netcdf4.num2date(file["time"][0], file["time"].units,
                                only_use_cftime_datetimes=False)
        expected = datetime.fromisoformat(rows[0]["recorded_utc"]).replace(tzinfo=None)
        assert abs((time - expected).total_seconds()) < 0.01


def test_an_empty_ledger_gives_a_table_with_a_header(tmp_path, capsys):
    Ledger(tmp_path / "night.sqlite").close()
    for ending in (".csv", ".nc"):
        assert main(["export", str(tmp_path / "night.sqlite"), str(tmp_path / f"t{ending}")]) == 0
    capsys.readouterr()
    assert (tmp_path / "t.csv").read_text(encoding="utf-8").startswith("trace,verdict,reasons,")


def test_tables_that_cannot_be_written_are_one_line(tmp_path, monkeypatch):
    table = {"trace": ["a"]}
    with pytest.raises(ExportError, match=r"must be .csv, .parquet, .nc; .xls is not known"):
        write_table(tmp_path / "a.xls", table, {})
    (tmp_path / "file").write_text("x", encoding="utf-8")
    with pytest.raises(ExportError, match="cannot be written"):
        write_table(tmp_path / "file" / "a.csv", table, {})
    for library, ending in (("pyarrow", ".parquet"), ("h5netcdf", ".nc")):
        monkeypatch.setitem(sys.modules, library, None)
        with pytest.raises(ExportError, match=rf"{library}.*scatterfit\[formats\]"):
            write_table(tmp_path / f"a{ending}", table, {})
    assert [path.name for path in tmp_path.iterdir()] == ["file"]


def test_netcdf_tells_a_value_set_for_a_pulse_from_the_column_of_that_name(tmp_path):
    table = {"trace": ["a"], "seed_diameter_nm": [80.0], "seed.diameter_nm": [80.0]}
    write_table(tmp_path / "a.nc", table, {})
    with h5netcdf.File(tmp_path / "a.nc") as file:
        assert {"seed_diameter_nm", "override_seed_diameter_nm"} <= set(file.variables)


def test_lists_in_overrides_are_json(tmp_path):
    table = {"trace": ["a", "b"], "analysis.window_ms": [json.dumps([1.0, 2.0]), None]}
    write_table(tmp_path / "a.csv", table, {})
    text = (tmp_path / "a.csv").read_text(encoding="utf-8")
    assert text == 'trace,analysis.window_ms\na,"[1.0, 2.0]"\nb,\n'
