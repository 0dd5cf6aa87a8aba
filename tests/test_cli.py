"""The command line: what is printed where, and with which exit code."""

import contextlib
import io
import json
import os
import re
import subprocess
import sys
from pathlib import Path

import pytest

from scatterfit import cli
from scatterfit.apparatus.keys import key_table
from scatterfit.cli import main
from scatterfit.errors import ChamberFileError, ScatterfitError, TraceError
from scatterfit.report.template import chamber_template


def run(capsys, *words):
    """Return exit code, standard output and standard error of one command."""
    code = main([str(word) for word in words])
    out, err = capsys.readouterr()
    return code, out, err


def assert_one_plain_line(text):
    assert text.count("\n") == 1
    assert text.startswith("scatterfit: ")
    assert not set(text) & set("│╭╮╰╯─┌┐└┘|")
    assert "Traceback" not in text


@pytest.mark.parametrize("words", [
    ["--help"], *([name, "--help"] for name in ("demo", "new", "check", "simulate", "fit")),
])
def test_help_goes_to_standard_output_and_shows_an_example(capsys, words):
    code, out, err = run(capsys, *words)
    assert code == 0
    assert err == ""
    assert "Example: scatterfit" in out or words == ["--help"]


def test_version(capsys):
    code, out, _ = run(capsys, "--version")
    assert code == 0
    assert out.startswith("scatterfit ")


@pytest.mark.parametrize("words", [
    [], ["fitt", "a", "b"], ["fit"], ["fit", "a.toml"], ["fit", "a", "b", "--colour", "red"],
    ["fit", "a", "b", "--exclude-ms", "1"], ["fit", "a", "b", "--exclude-ms", "1", "x"],
    ["fit", "a", "b", "--exclude-ms", "3", "2"], ["simulate", "a", "--out", "b", "--count", "0"],
    ["simulate", "a"], ["simulate", "a", "--out", "b", "--duration-ms", "-3"],
    ["simulate", "a", "--out", "b", "--number", "nan"],
    ["simulate", "a", "--out", "b", "--duration-ms", "1e5", "--rate-khz", "1e4"],
    ["new", "."],
])
def test_a_wrong_command_is_one_line_and_exit_2(capsys, words):
    code, out, err = run(capsys, *words)
    assert code == 2
    assert out == ""
    assert_one_plain_line(err)


def test_a_wrong_command_is_corrected(capsys):
    assert "fit" in run(capsys, "fitt", "a", "b")[2]


@pytest.mark.parametrize(("error", "code"), [
    (ChamberFileError("bench.toml: beam.colour = 1: unknown key"), 2), (TraceError("no rows"), 1),
    (ScatterfitError("no"), 1), (OSError(28, "No space left on device"), 1), (KeyError("x"), 1),
])
def test_an_error_is_one_line_with_its_exit_code(capsys, monkeypatch, error, code):
    def fail():
        raise error

    monkeypatch.setattr("scatterfit.report.template.chamber_template", fail)
    found, out, err = run(capsys, "new", "never-written.toml")
    assert (found, out) == (code, "")
    assert_one_plain_line(err)


def test_debug_shows_where_an_error_arose(capsys):
    code, _, err = run(capsys, "fit", "no-such-bench.toml", "a.csv", "--debug")
    assert code == 2
    assert "Traceback" in err
    assert err.splitlines()[-1].startswith("scatterfit: no-such-bench.toml")


def test_excluded_ranges_are_read_as_pairs():
    words = cli._paired(["fit", "a", "b", "--exclude-ms", "-5", "3", "--exclude-ms", "7", "8.5"])
    pairs = [word for word in words if " " in word]
    assert cli._exclusions(pairs) == ((-0.005, 0.003), (0.007, 0.0085))


def test_new_refuses_to_replace_a_file_unless_told_to(capsys, tmp_path):
    path = tmp_path / "bench.toml"
    assert run(capsys, "new", path)[0] == 0
    path.write_text("mine", encoding="utf-8")
    code, _, err = run(capsys, "new", path)
    assert (code, path.read_text(encoding="utf-8")) == (2, "mine")
    assert_one_plain_line(err)
    assert run(capsys, "new", path, "--force")[0] == 0
    assert "wavelength_nm" in path.read_text(encoding="utf-8")


def test_new_names_the_file_that_it_cannot_write(capsys, tmp_path):
    code, _, err = run(capsys, "new", tmp_path / "no-such-folder" / "bench.toml")
    assert code == 1
    assert_one_plain_line(err)
    assert "no-such-folder" in err


NO_GAUGE = """
[beam]
wavelength_nm = 635.0
polarization = "unpolarized"
[[detector]]
column = "side_V"
angle_deg = 60.0
half_angle_deg = 1.0
dark_V = 0.01
full_scale_V = 2.0
[vapour]
substance = "water"
saturation_ratio = 0.5
[gas]
carrier = {argon = 0.5, helium = 0.5}
[chamber]
temperature_K = 295.0
pressure_kPa = 90.0
[growth]
temperature_K = 268.0
pressure_kPa = 70.0
[pulse]
hold_ms = 1.2
temperature_K = 243.0
pressure_kPa = 54.0
[analysis]
max_radius_um = 3.0
"""


@pytest.fixture
def bench(tmp_path):
    """Return the path of a small bench without a pressure gauge."""
    path = tmp_path / "bench.toml"
    path.write_text(NO_GAUGE, encoding="utf-8")
    return path


def write_rows(path, rows, header="time_ms,side_V"):
    path.write_text("\n".join([header, *rows]) + "\n", encoding="utf-8")
    return path


def test_the_file_that_new_writes_passes_check(capsys, tmp_path):
    path = tmp_path / "bench.toml"
    assert run(capsys, "new", path)[0] == 0
    code, out, err = run(capsys, "check", path)
    assert (code, err) == (0, "")
    assert "saturation ratio            0.39" in out


def test_every_key_of_the_new_file_is_known_once_uncommented():
    lines = chamber_template().splitlines()
    keys = [line.removeprefix("# ").partition(" = ")[0] for line in lines
            if " = " in line.partition("#  ")[0] and not line.startswith("# The ")]
    plain = [key for key in keys if not key.endswith("_sigma")]
    assert plain == [key.name for key in key_table()]


def test_check_shows_states_properties_and_sources(capsys, bench):
    code, out, err = run(capsys, "check", bench)
    assert (code, err) == (0, "")
    for expected in ("635 nm", "unpolarized", "60 ± 1 degrees", "243 K", "1.2 ms", "268 K",
                     "helium 0.5", "IAPWS", "Murphy and Koop", "Fuller", "maxima", "lobes of"):
        assert expected in out
    lines = [line for line in out.splitlines() if str(bench) not in line]
    assert max(map(len, lines)) <= 80


def test_check_tells_how_a_trace_was_understood(capsys, bench, tmp_path):
    rows = [f"{0.1 * i:.1f},{0.01 + 0.001 * (i % 7):.3f},{i}" for i in range(200)]
    rows[70:73] = ["7.0,2.0,0", "7.1,2.0,0", "7.2,,0"]
    trace = write_rows(tmp_path / "a.csv", rows, "time_ms,side_V,room_V")
    code, out, _ = run(capsys, "check", bench, trace, "--set", "chamber.temperature_K=296")
    assert code == 0
    for expected in ("200, from 0 ms to 19.9 ms, every 0.1 ms", "0.013 V", "1 samples, left out",
                     "2 samples of 2 V", "stated dark level           0.01 V", "ignored: room_V",
                     "chamber.temperature_K       296"):
        assert expected in out


@pytest.mark.parametrize(("header", "rows", "expected"), [
    ("time_ms,other_V", [f"{i},0" for i in range(30)], "side_V"),
    ("time_ms,side_V", [f"{i},0" for i in range(30)] + ["29,0"], "29"),
    ("time_ms,side_V", [f"{i},0" for i in range(30)] + ["30,zero"], "zero"),
    ("time_ms,side_V", ["0,0"], "20"),
])
def test_an_unusable_trace_is_exit_1_and_says_why(capsys, bench, tmp_path, header, rows, expected):
    trace = write_rows(tmp_path / "a.csv", rows, header)
    code, out, err = run(capsys, "check", bench, trace)
    assert (code, out) == (1, "")
    assert_one_plain_line(err)
    assert expected in err


@pytest.mark.parametrize(("old", "new", "expected"), [
    ("wavelength_nm", "wavelenght_nm", "wavelength_nm"), ('"water"', '"watr"', "water"),
    ("= 0.5\n", "= 1.5\n", "saturation"), ("[beam]", "[beam", "TOML"),
    ("635.0", '"red"', "beam.wavelength_nm"),
])
@pytest.mark.parametrize("command", ["check", "fit"])
def test_a_wrong_chamber_file_is_one_line_and_exit_2(capsys, bench, command, old, new, expected):
    bench.write_text(NO_GAUGE.replace(old, new, 1), encoding="utf-8")
    code, out, err = run(capsys, command, bench, *(["trace.csv"] if command == "fit" else []))
    assert (code, out) == (2, "")
    assert_one_plain_line(err)
    assert str(bench) in err
    assert expected in err


@pytest.mark.parametrize("setting", ["chamber.temprature_K=297", "chamber.temperature_K=warm", "x"])
def test_a_wrong_setting_is_exit_2(capsys, bench, setting):
    code, _, err = run(capsys, "check", bench, "--set", setting)
    assert code == 2
    assert_one_plain_line(err)


SMALL = NO_GAUGE.replace("[growth]\ntemperature_K = 268.0\npressure_kPa = 70.0\n", "").replace(
    "[pulse]\nhold_ms = 1.2\ntemperature_K = 243.0\npressure_kPa = 54.0\n",
    '[pressure]\ncolumn = "gauge_kPa"\n',
).replace("dark_V", "gain_V_m = 1e5\ndark_V").replace("full_scale_V = 2.0", "full_scale_V = 10.0")
TRUE_NUMBER = 4000.0


@pytest.fixture(scope="module")
def simulated(tmp_path_factory):
    """Return the folder of one simulated pulse."""
    folder = tmp_path_factory.mktemp("simulated")
    chamber = folder / "small.toml"
    chamber.write_text(SMALL, encoding="utf-8")
    words = ["--number", TRUE_NUMBER, "--duration-ms", 50, "--rate-khz", 20, "--seed", 5]
    assert main(["simulate", str(chamber), "--out", str(folder / "out"), *map(str, words)]) == 0
    return folder / "out"


@pytest.fixture(scope="module")
def fitted(simulated, tmp_path_factory):
    """Return exit code, JSON and standard error of its fit, and the folder of its files."""
    out, err, folder = io.StringIO(), io.StringIO(), tmp_path_factory.mktemp("fitted") / "deep"
    with contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
        code = main([
            "fit", str(simulated / "small.toml"), str(simulated / "pulse-001.csv"), "--json",
            "--out", str(folder), "--set", "chamber.temperature_K=295.01", "--exclude-ms", "30",
            "31.5",
        ])
    return code, json.loads(out.getvalue()), err.getvalue(), folder


def test_simulate_writes_traces_truth_and_the_chamber_file(simulated):
    names = sorted(path.name for path in simulated.iterdir())
    assert names == ["pulse-001.csv", "small.toml", "truth.json"]
    truth = json.loads((simulated / "truth.json").read_text(encoding="utf-8"))["pulse-001.csv"]
    assert truth["N_per_cm3"] == TRUE_NUMBER
    assert (simulated / "small.toml").read_text(encoding="utf-8") == SMALL


def test_the_same_seed_gives_the_same_pulse(capsys, simulated, tmp_path):
    words = ["simulate", simulated / "small.toml", "--out", tmp_path / "again", "--number",
             TRUE_NUMBER, "--duration-ms", 50, "--rate-khz", 20]
    for seed, same in ((5, True), (6, False)):
        assert run(capsys, *words, "--seed", seed)[0] == 0
        again = (tmp_path / "again" / "pulse-001.csv").read_bytes()
        assert (again == (simulated / "pulse-001.csv").read_bytes()) is same


def test_fit_finds_what_simulate_put_in(simulated, fitted):
    code, result, _, _ = fitted
    truth = json.loads((simulated / "truth.json").read_text(encoding="utf-8"))["pulse-001.csv"]
    assert code == 0
    assert result["verdict"] == "accepted"
    radius, number = result["final_radius_um"], result["concentration_per_cm3"]
    assert radius["value"] == pytest.approx(truth["final_radius_um"], rel=5e-3)
    assert abs(number["value"] - TRUE_NUMBER) < 4 * number["sigma"]


def test_fit_records_what_was_set_by_hand(fitted):
    provenance = fitted[1]["provenance"]
    assert provenance["overrides"] == {"chamber.temperature_K": 295.01}
    assert provenance["exclude_ms"] == [[30.0, 31.5]]


def test_fit_writes_json_and_figure_and_says_so_on_standard_error(fitted):
    _, result, err, folder = fitted
    written = folder / "pulse-001.json"
    assert json.loads(written.read_text(encoding="utf-8")) == result
    assert (folder / "pulse-001.png").read_bytes().startswith(b"\x89PNG")
    assert err.splitlines() == [f"wrote {written}", f"wrote {folder / 'pulse-001.png'}"]


@pytest.mark.parametrize("name", ["damaged.csv", "missing.csv"])
def test_a_failed_fit_is_exit_1_and_still_prints_its_json(capsys, simulated, tmp_path, name):
    text = (simulated / "pulse-001.csv").read_text(encoding="utf-8").splitlines()
    text[40] = text[39]
    (tmp_path / "damaged.csv").write_text("\n".join(text), encoding="utf-8")
    code, out, err = run(capsys, "fit", simulated / "small.toml", tmp_path / name, "--json")
    assert (code, err) == (1, "")
    result = json.loads(out)
    assert result["verdict"] == "failed"
    assert result["final_radius_um"] is None
    assert name in result["reasons"][0]["text"]


def test_a_blank_is_rejected_with_a_limit_and_exit_0(capsys, simulated, tmp_path):
    words = ["--number", 0, "--duration-ms", 50, "--rate-khz", 20]
    assert run(capsys, "simulate", simulated / "small.toml", "--out", tmp_path, *words)[0] == 0
    code, out, _ = run(capsys, "fit", simulated / "small.toml", tmp_path / "pulse-001.csv")
    assert code == 0
    assert out.startswith("REJECTED")
    assert "[no-cloud]" in out
    assert "upper limit (95 percent)" in out


@pytest.mark.slow
def test_demo_needs_nothing_and_shows_found_beside_true(capsys, tmp_path):
    code, out, err = run(capsys, "demo", "--out", tmp_path / "demo")
    assert (code, err) == (0, "")
    assert out.count("accepted") == 3
    assert "blank.csv, seed 14: rejected (no-cloud)" in out
    written = {path.suffix for path in (tmp_path / "demo").iterdir()}
    assert written == {".csv", ".json", ".png", ".toml"}
    apart = [float(found) for found in re.findall(r"([+-][\d.]+) σ", out)]
    assert len(apart) == 21
    assert max(map(abs, apart)) < 4


# What is handled is POSIX's EPIPE; Windows was not tried.
@pytest.mark.skipif(os.name == "nt", reason="a broken pipe is another error there")
def test_a_closed_pipe_is_silent():
    call = [sys.executable, "-m", "scatterfit", "--help"]
    with subprocess.Popen(call, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        process.stdout.close()
        assert process.stderr.read() == b""


def test_readme_commands_are_the_ones_that_are_run():
    root = Path(__file__).resolve().parents[1]
    readme = (root / "README.md").read_text(encoding="utf-8")
    blocks = [block.partition("```")[0].strip() for block in readme.split("```bash\n")[1:]]
    assert blocks[0].endswith("scatterfit demo")
    assert blocks[1] in (root / ".ci" / "run").read_text(encoding="utf-8").splitlines()
    assert all("\n" not in block for block in blocks)
