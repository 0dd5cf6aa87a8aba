"""The command line: what is printed where, and with which exit code."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from scatterfit import cli
from scatterfit.cli import main
from scatterfit.errors import ChamberFileError, ScatterfitError, TraceError


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
    ["simulate", "a"],
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


def test_debug_shows_where_an_error_arose(monkeypatch):
    def fail():
        message = "boom"
        raise ZeroDivisionError(message)

    monkeypatch.setattr("scatterfit.report.template.chamber_template", fail)
    with pytest.raises(ZeroDivisionError, match="boom"):
        main(["--debug", "new", "never-written.toml"])


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


@pytest.mark.skipif(os.name == "nt", reason="pipes close differently there")
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
