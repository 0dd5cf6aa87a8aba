"""The pages say what the program does: generated parts are fresh, every key and code is there."""

import importlib.util
import re
import runpy
from pathlib import Path

import pytest

from scatterfit.apparatus.keys import key_table
from scatterfit.inversion.verdict import REASONS
from scatterfit.measured_pulse.record import MeasuredPulse

ROOT = Path(__file__).resolve().parents[1]
DOCS = ROOT / "docs"
PAGES = [ROOT / "README.md", ROOT / "DEVELOPERS.md", *sorted(DOCS.glob("*.md"))]


def generate():
    spec = importlib.util.spec_from_file_location("generate", DOCS / "generate.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


@pytest.mark.parametrize("page", ["command-line.md", "chamber-file.md"])
def test_generated_parts_are_fresh(page):
    fresh = generate().renewed(page)
    assert (DOCS / page).read_text(encoding="utf-8") == fresh, "run docs/generate.py"


def test_every_key_of_the_chamber_file_is_documented():
    text = (DOCS / "chamber-file.md").read_text(encoding="utf-8")
    keys = key_table()
    assert len(keys) > 40
    for key in keys:
        assert f"| `{key.name}` | " in text


def test_every_key_of_a_result_is_documented():
    result = MeasuredPulse("pulse.csv", "failed").to_dict()
    text = (DOCS / "result.md").read_text(encoding="utf-8")
    for key in (*result, *result["nucleation"], *result["concentration_by"], *result["curve"]):
        assert f"`{key}`" in text


def test_every_reason_is_explained():
    text = (DOCS / "reasons.md").read_text(encoding="utf-8")
    explained = set(re.findall(r"^\| `([a-z-]+)` \|", text, re.MULTILINE))
    assert len(REASONS) > 20
    assert set(REASONS) <= explained


def test_every_reason_in_the_code_is_in_the_table():
    sources = [path for folder in ("inversion", "measured_pulse", "droplet_growth")
               for path in (ROOT / "scatterfit" / folder).glob("*.py")]
    found = {code for path in [*sources, ROOT / "scatterfit" / "files_fit.py"] for code in
             re.findall(r"(?:Reason|Finding)\(\s*\"([a-z-]+)\"", path.read_text(encoding="utf-8"))}
    assert len(found) > 15
    assert found <= set(REASONS)


@pytest.mark.parametrize("path", PAGES, ids=lambda path: path.name)
def test_links_lead_somewhere(path):
    links = re.findall(r"\]\(([^)#]+)\)", path.read_text(encoding="utf-8"))
    for link in links:
        assert link.startswith("http") or (path.parent / link).exists(), link


def test_cautions_stand_where_a_newcomer_looks():
    readme = (ROOT / "README.md").read_text(encoding="utf-8")
    for word in ("Laser", "pressure", "burn", "local codes", "licensed"):
        assert word in readme


@pytest.mark.slow
@pytest.mark.parametrize("path", sorted((ROOT / "examples").glob("*.py")), ids=lambda p: p.name)
def test_examples_run(capsys, path):
    runpy.run_path(str(path), run_name="__main__")
    assert capsys.readouterr().out.count("\n") >= 3
