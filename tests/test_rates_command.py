"""The commands rates and activation: tables read, JSON, figures, one-line errors."""

import json
import math
from contextlib import closing
from dataclasses import replace

import night_fits
import numpy as np
import pytest
from water_isotherms import VIISANEN_STREY_REISS, WOELK_STREY, columns

from scatterfit.cli import main
from scatterfit.errors import InvalidInputError
from scatterfit.files_table import is_ledger, read_table
from scatterfit.matter import substance
from scatterfit.measured_pulse.record import NucleationConditions, Quantity
from scatterfit.nucleation.isotherm import RateSettings
from scatterfit.nucleation.rates import analyse_rates
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.night import bind, check_plan
from scatterfit.overnight.pulse_table import pulse_table
from scatterfit.overnight.work import measure
from scatterfit.report.nucleation_figures import rates_figure

T, S, J = "nucleation_temperature_K", "nucleation_saturation_ratio", "nucleation_rate_per_cm3_s"
ISOTHERM_KEYS = {"temperature_K", "pulses", "slope", "slope_robust", "critical_cluster",
                 "saturation_ratio_at", "theory_log10_ratio", "outliers", "censored"}


def run(capsys, *words):
    """Return exit code, standard output and standard error of one command."""
    code = main([str(word) for word in words])
    out, err = capsys.readouterr()
    return code, out, err


def write(path, cells, delimiter=","):
    rows = zip(*cells.values(), strict=True)
    lines = [delimiter.join(cells), *(delimiter.join(map(str, row)) for row in rows)]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def water(tmp_path_factory):
    """Return a table of the published isotherms of water, with their campaign."""
    cells = columns([WOELK_STREY, VIISANEN_STREY_REISS])
    first = sum(len(pair[0].split()) for pair in WOELK_STREY.values())
    count = len(cells[T])
    cells["campaign"] = ["2001"] * first + ["1993"] * (count - first)
    return write(tmp_path_factory.mktemp("tables") / "water.csv", cells)


@pytest.fixture(scope="module")
def seeds(tmp_path_factory):
    """Return a table of an invented seeded run."""
    random = np.random.default_rng(41)
    x = np.linspace(math.log(1.1), math.log(1.35), 40)
    part = 0.5 * np.array([math.erfc(-z / math.sqrt(2)) for z in (x - math.log(1.22)) / 0.03])
    cells = {T: np.full(40, 268.0), S: np.exp(x), "concentration_per_cm3":
             random.poisson(900 * part), "seed_concentration_per_cm3": np.full(40, 900.0),
             "seed_diameter_nm": np.full(40, 14.0)}
    return write(tmp_path_factory.mktemp("tables") / "seeds.csv", cells)


def numbers_in(value):
    if isinstance(value, dict):
        value = list(value.values())
    if isinstance(value, list):
        for part in value:
            yield from numbers_in(part)
    elif isinstance(value, float):
        yield value


# --- rates ---------------------------------------------------------------------------------------


@pytest.mark.published
def test_rates_as_json(capsys, water):
    code, out, _ = run(capsys, "rates", water, "--json", "--substance", "water")
    assert code == 0
    result = json.loads(out)
    assert [one["pulses"] for one in result["isotherms"]][:3] == [45, 20, 17]
    for isotherm in result["isotherms"]:
        assert set(isotherm) >= ISOTHERM_KEYS
        assert isotherm["censored"] == 0
        (at,) = isotherm["saturation_ratio_at"]
        assert at["rate_per_cm3_s"] == 1e7
        for quantity in (isotherm["slope"], at["saturation_ratio"], isotherm["critical_cluster"]):
            assert quantity["value"] > 0
            assert quantity["sigma"] > 0
        assert set(isotherm["theory_log10_ratio"]) == set(result["theories"])
        shift = isotherm["slope"]["value"] - isotherm["critical_cluster"]["value"]
        assert shift == pytest.approx(1.0)
    assert all(map(math.isfinite, numbers_in(result)))
    slip = next(one for one in result["isotherms"] if one["temperature_K"] == 249.75)
    assert slip["outliers"] == ["row 71"]  # the header is row 1, the slip the 70th pulse


def test_rates_as_text(capsys, water):
    code, out, err = run(capsys, "rates", water, "--by", "campaign", "--methods")
    assert code == 0
    assert "2001: 259.86  45     33.3 ± 2.1" in out
    assert "[outliers] row 71" in out
    assert "Kashchiev 1982" in out
    words = " ".join(out.split())
    assert "Uncertainties: scatter alone; what all pulses share" in words
    assert "saturation pressure: Murphy and Koop 2005" in words
    assert err.startswith("vapour not stated: water assumed")


def test_convention_rates_and_tolerance(capsys, water):
    words = ("--json", "--convention", "2", "--at-rate", "1e6", "--at-rate", "1e8",
             "--tolerance-K", "1")
    result = json.loads(run(capsys, "rates", water, *words)[1])
    assert len(result["isotherms"]) < 14  # 259.86 and 259.0 K are one now
    for isotherm in result["isotherms"]:
        shift = isotherm["slope"]["value"] - isotherm["critical_cluster"]["value"]
        assert shift == pytest.approx(2.0)
        assert [at["rate_per_cm3_s"] for at in isotherm["saturation_ratio_at"]] == [1e6, 1e8]
        assert isotherm["temperature_spread_K"] <= 2.0


def test_two_campaigns_compared(capsys, tmp_path):
    first = write(tmp_path / "a.csv", columns([WOELK_STREY], corrected=True))
    second = write(tmp_path / "b.csv", columns([VIISANEN_STREY_REISS]))
    result = json.loads(run(capsys, "rates", first, "--compare", second, "--json")[1])
    ratios = {one["temperature_K"]: one["log10_rate_difference"] for one in result["comparison"]}
    # The rates of 1993 as copied lie a factor of 8 to 22 below those of 2001.
    assert set(ratios) == {259.86, 239.58}
    for ratio in ratios.values():
        assert -math.log10(22) - 0.1 < ratio["value"] < -math.log10(8) + 0.1


@pytest.mark.parametrize("suffix", [".png", ".pdf", ".svg"])
def test_rates_are_drawn(capsys, water, tmp_path, suffix):
    path = tmp_path / f"rates{suffix}"
    code, _, err = run(capsys, "rates", water, "--figure", path)
    assert code == 0
    assert f"wrote {path}" in err
    assert path.stat().st_size > 10_000


def test_the_figure_shows_every_pulse_every_fit_and_the_outlier(water):
    figure = rates_figure(analyse_rates(read_table(water), RateSettings(substance("water"))))
    above, below = figure.axes
    drawn = [line for line in above.lines if line.get_linestyle() == "None"]
    assert sum(len(line.get_xdata()) for line in drawn) == 341 + 3  # three outliers are ringed
    assert sum(line.get_linestyle() == "-" for line in above.lines) == 14
    assert sum(line.get_linestyle() == "--" for line in above.lines) == 14
    assert above.get_xscale() == above.get_yscale() == below.get_yscale() == "log"
    labels = {text.get_text() for text in above.get_legend().get_texts()}
    assert {"259.9 K", "Woelk and Strey 2001", "outlier"} <= labels


def test_ten_thousand_rows(capsys, tmp_path):
    random = np.random.default_rng(42)
    kelvin = np.repeat([235.0, 240.0, 245.0, 250.0], 2500) + 0.05 * random.normal(size=10_000)
    x = random.uniform(-0.08, 0.08, 10_000)
    ratio, rate = 12 * np.exp(x), 1e7 * np.exp(30 * x + 0.1 * random.normal(size=10_000))
    cells = {"trace": [f"p{place}.csv" for place in range(10_000)], T: kelvin, S: ratio,
             f"{S}_sigma": 0.001 * ratio, J: rate, f"{J}_sigma": 0.1 * rate}
    result = json.loads(run(capsys, "rates", write(tmp_path / "big.csv", cells), "--json")[1])
    assert [one["pulses"] for one in result["isotherms"]] == [2500] * 4
    for isotherm in result["isotherms"]:
        slope = isotherm["slope"]
        assert abs(slope["value"] - 30) < 4 * slope["sigma"]
        assert slope["sigma"] < 0.1


# --- activation ----------------------------------------------------------------------------------


def test_activation_as_json_and_figure(capsys, seeds, tmp_path):
    path = tmp_path / "activation.png"
    code, out, _ = run(capsys, "activation", seeds, "--json", "--figure", path, "--kappa", "0.3")
    assert code == 0
    (found,) = json.loads(out)["isotherms"]
    assert abs(found["onset"]["value"] - 1.22) < 4 * found["onset"]["sigma"]
    assert abs(found["width"]["value"] - 0.03) < 4 * found["width"]["sigma"]
    assert found["koehler"]["kappa"] == 0.3
    assert found["kelvin"]["saturation_ratio"] > found["koehler"]["saturation_ratio"]
    assert len(found["points"]) == 40
    assert all(map(math.isfinite, numbers_in(found)))
    assert path.stat().st_size > 10_000


def test_activation_as_text(capsys, seeds):
    code, out, _ = run(capsys, "activation", seeds, "--methods")
    assert code == 0
    assert "onset, S at half             1.2" in out
    assert "Petters and Kreidenweis 2007" in " ".join(out.split())
    assert max(map(len, out.splitlines())) <= 80


# --- tables and errors ---------------------------------------------------------------------------


def test_a_table_with_semicolons_decimal_commas_and_a_mark(tmp_path):
    path = tmp_path / "table.csv"
    lines = ["\ufeff# a remark", f"{T};{S};{J};trace", "240,5;12,1;1,5e7;a,b.csv", "",
             "240,5;12;;c", ""]
    path.write_bytes("\r\n".join(lines).encode())
    table = read_table(path)
    assert table.names == ("a,b.csv", "c")
    assert table.numbers[T].tolist() == [240.5, 240.5]
    assert table.numbers[J][0] == 1.5e7
    assert math.isnan(table.numbers[J][1])


def test_columns_nobody_knows_are_kept_as_text(tmp_path):
    cells = {T: [240, 241], S: [12, 11], J: [1e7, ""], "x.y": ["a", "b"]}
    assert read_table(write(tmp_path / "t.tsv", cells, "\t")).texts["x.y"] == ("a", "b")


@pytest.mark.parametrize(("text", "expected"), [
    (f"{T},{S},{J}\n240,12,abc\n", f"row 2, column {J} = abc: must be a number"),
    (f"{T},{S},{J}\n240,12,1e7\n240,-1,1e7\n", f"row 3, column {S} = -1: must be finite and pos"),
    (f"{T},{S},{J}\n240,12,inf\n", f"row 2, column {J} = inf: must be finite"),
    (f"{T},{S},{J}\n240,12\n", "row 2: 2 cells, the header has 3"),
    (f"{T},{S},{S}\n240,12,1e7\n", f"column {S} is there twice"),
    (f"{T},{S},verdict,{J}\n240,12,good,1e7\n", "row 2, column verdict = good: must be one of"),
    (f"{T},{S},{J}_sigma,{J}\n240,12,-1,1e7\n", f"row 2, column {J}_sigma = -1"),
    (f"{T},{S},nucleation_rate\n240,12,1e7\n", f"no column {J}; did you mean nucleation_rate?"),
    ("a,b\n1,2\n", f"no column {T}; there are a, b"), ("", "no pulses"),
    (f"{T},{S},{J}\n", "no pulses"),
])
def test_a_damaged_table_is_one_line_and_exit_1(capsys, tmp_path, text, expected):
    path = tmp_path / "table.csv"
    path.write_text(text, encoding="utf-8")
    code, out, err = run(capsys, "rates", path, "--substance", "water")
    assert (code, out) == (1, "")
    assert err.count("\n") == 1
    assert expected in err
    assert str(path) in err


def test_a_missing_file_is_one_line_and_exit_1(capsys, tmp_path):
    code, out, err = run(capsys, "rates", tmp_path / "none.csv")
    assert (code, out, err.count("\n")) == (1, "", 1)
    assert "none.csv" in err


def test_bytes_that_are_no_text_are_refused(tmp_path):
    path = tmp_path / "t.csv"
    path.write_bytes(b"a,b\n\xff\xfe,1\n")
    with pytest.raises(InvalidInputError, match="not UTF-8"):
        read_table(path)
    assert not is_ledger(path)


@pytest.mark.parametrize(("words", "expected"), [
    (["--by", "campain"], "did you mean campaign?"), (["--substance", "watter"], "water"),
    (["--figure", "x.bmp"], ".png"), (["--convention", "3"], "equal to 2"),
    (["--tolerance-K", "0"], "0.001"),
    (["--carrier", "argn"], "argon"), (["--background-diameter-nm", "100"], "belong together"),
    (["--background-per-cm3", "100"], "belong together"),
    (["--figure", "/nowhere/at/all/x.png"], "no folder"),
])
def test_a_wrong_option_is_one_line_and_exit_2(capsys, water, words, expected):
    code, out, err = run(capsys, "rates", water, *words)
    assert (code, out) == (2, "")
    assert err.count("\n") == 1
    assert expected in err


def test_a_column_that_no_two_pulses_share_is_refused(capsys, tmp_path):
    cells = {T: [240.0] * 30, S: np.linspace(11, 13, 30), J: np.geomspace(1e7, 1e9, 30)}
    path = write(tmp_path / "t.csv", cells)
    code, out, err = run(capsys, "rates", path, "--by", S)
    assert (code, out, err.count("\n")) == (2, "", 1)
    assert "30 different values in 30 pulses" in err


def test_what_is_empty_and_what_is_not_found_is_said(capsys, tmp_path):
    cells = {T: [240.0] * 4, S: [11.0, 11.5, 12.0, 12.5], J: [1e7, 4e7, 1.6e8, 6e8],
             "gas": ["", "", "argon", "argon"], "nucleation_effective_ms": [1.0] * 4}
    path = write(tmp_path / "t.csv", cells)
    _, out, err = run(capsys, "rates", path, "--by", "gas", "--hold-series")
    assert "(empty): 240.00" in out
    assert "argon: 240.00" in out
    assert "no series of holds" in err


HEAD = f"{T},{S},{J}"


@pytest.mark.parametrize("text", [
    f"{HEAD}\n240,12,1e7\n", f"{HEAD}\n240,12,1e7\n240,12.5,4e7\n",
    f"{HEAD}\n240,12,1e7\n240,12,4e7\n240,12,2e7\n", f"{HEAD}\n240,,\n",
    f"{HEAD},verdict,upper_limit_per_cm3\n240,12,,rejected,5\n240,12.5,,rejected,5\n",
    f"{HEAD},nucleation_rate_upper_limit_per_cm3_s\n240,12,,5e5\n240,12.5,0,4e5\n",
    f"{HEAD},{J}_sigma\n240,12,1e7,0\n240,12.5,4e7,0\n240,13,1.6e8,0\n",
])
def test_little_data_gives_nulls_and_a_figure_but_no_error(capsys, tmp_path, text):
    path, figure = tmp_path / "few.csv", tmp_path / "few.png"
    path.write_text(text, encoding="utf-8")
    code, out, _ = run(capsys, "rates", path, "--json", "--figure", figure, "--hold-series")
    assert code == 0
    for isotherm in json.loads(out)["isotherms"]:
        assert set(isotherm) >= ISOTHERM_KEYS
        assert len(isotherm["saturation_ratio_at"]) == 1
        assert len(isotherm["theory_log10_ratio"]) == 5
    assert figure.exists()
    assert run(capsys, "rates", path)[0] == 0


def test_an_odd_activation_is_no_error_and_names_the_odd_pulse(capsys, tmp_path):
    path = tmp_path / "odd.csv"
    ratio = np.linspace(1.05, 1.35, 16)
    part = 1 / (1 + np.exp(-(ratio - 1.2) / 0.01))
    number = np.where(np.arange(16) == 14, 0.0, np.round(1000 * part))
    write(path, {T: np.full(16, 270.0), S: ratio, "concentration_per_cm3": number,
                 "seed_concentration_per_cm3": np.full(16, 1000.0),
                 "concentration_per_cm3_sigma": np.sqrt(number)})
    code, out, _ = run(capsys, "activation", path, "--json", "--figure", tmp_path / "odd.png")
    assert code == 0
    (found,) = json.loads(out)["isotherms"]
    assert found["outliers"] == ["row 16"]
    assert abs(found["onset"]["value"] - 1.2) < 0.01


def on_a_line(chamber, trace, **settings):
    """Return a fit whose rate lies on a line of slope 30, told by the trace's number."""
    pulse = night_fits.plain(chamber, trace, **settings)
    place = int(str(trace)[-7:-4])
    ratio = 10.0 * math.exp(0.01 * place)
    rate = 1e13 * math.exp(0.3 * place)
    state = NucleationConditions(Quantity(245.0, 0.1), Quantity(55e3, 50.0),
                                 Quantity(ratio, 0.1), Quantity(1e-3, 1e-5),
                                 Quantity(rate, 0.1 * rate), -0.009)
    overrides = {"chamber.temperature_K": 295.0} if place == 0 else {}
    return replace(pulse, nucleation=state, provenance={"overrides": overrides})


def test_rates_from_a_ledger(capsys, tmp_path):
    plan = replace(night_fits.make_folder(tmp_path, 8), fit=on_a_line)
    with closing(Ledger(tmp_path / "night.sqlite")) as ledger:
        bind(ledger, plan, check_plan(plan))
        with ledger.writing():
            for place in range(8):
                ledger.put(Job(f"p{place:03d}.csv"), "new")
        ledger.store([measure(plan, job) for job in ledger.claim(100)])
    assert is_ledger(ledger.path)
    table, bench = pulse_table(ledger.path)
    assert bench.vapour.substance == "water"
    kelvin = table.numbers["chamber.temperature_K"]
    assert kelvin[0] == 295.0  # the override; the chamber file's value elsewhere
    assert set(kelvin[1:]) == {bench.chamber.temperature}
    code, out, err = run(capsys, "rates", ledger.path, "--json")
    assert (code, err) == (0, "")
    result = json.loads(out)
    (isotherm,) = result["isotherms"]
    assert isotherm["pulses"] == 8
    assert isotherm["slope"]["value"] == pytest.approx(30.0, rel=1e-6)
    assert result["substance_assumed"] is False


def test_a_background_goes_from_chamber_file_and_trace_through_ledger_and_export(capsys, tmp_path):
    plan = replace(night_fits.make_folder(tmp_path, 8), fit=on_a_line)
    lines = ("[background]\nconcentration_per_cm3 = 5e4\nconcentration_per_cm3_sigma = 1e4\n"
             "diameter_nm = 200.0\n")
    with plan.chamber.open("a", encoding="utf-8") as file:
        file.write(lines)
    with closing(Ledger(tmp_path / "night.sqlite")) as ledger:
        bind(ledger, plan, check_plan(plan))
        with ledger.writing():
            for place in range(8):
                ledger.put(Job(f"p{place:03d}.csv"), "new")
        ledger.store([measure(plan, job) for job in ledger.claim(100)])
    found = json.loads(run(capsys, "rates", ledger.path, "--json")[1])["isotherms"][0]
    lost = found["losses"]
    assert lost["corrected"]
    assert lost["lost_percent"]["sigma"] > 0.2 * lost["lost_percent"]["value"]
    assert "by temperature and pressure" in lost["density"]
    path = tmp_path / "night.csv"
    assert run(capsys, "export", ledger.path, path)[0] == 0
    row = path.read_text(encoding="utf-8").splitlines()[2].split(",")
    head = path.read_text(encoding="utf-8").splitlines()[0].split(",")
    assert float(row[head.index("background_concentration_per_cm3")]) == 5e4
    assert float(row[head.index("background_concentration_per_cm3_sigma")]) == 1e4
    _, out, err = run(capsys, "rates", path, "--json", "--substance", "water")
    assert "nitrogen assumed" in err
    out = run(capsys, "rates", path, "--json", "--substance", "water", "--carrier", "argon")[1]
    same = json.loads(out)["isotherms"][0]
    assert same["losses"] == lost
    assert same["slope"] == found["slope"]
    plain = json.loads(run(capsys, "rates", ledger.path, "--json", "--quote-losses")[1])
    ratio = found["rate_range_per_cm3_s"][0] / plain["isotherms"][0]["rate_range_per_cm3_s"][0]
    assert ratio == pytest.approx(lost["factor_on_rate"]["value"], rel=0.01)
    text = " ".join(run(capsys, "rates", ledger.path)[1].split())
    assert "J above is corrected for them" in text
    assert "J times" in text


def test_pulses_excluded_in_a_ledger_stay_excluded_in_its_export(tmp_path):
    """The exported column ``excluded`` is 1 where a person has excluded the pulse."""
    from scatterfit.files_table import read_table

    path = tmp_path / "night.csv"
    path.write_text(
        "trace,nucleation_temperature_K,nucleation_saturation_ratio,nucleation_rate_per_cm3_s,excluded\n"
        "a.csv,250,9.0,1e7,0\nb.csv,250,9.2,2e7,1\nc.csv,250,9.4,3e7,0\n", encoding="utf-8")
    table = read_table(path)
    assert list(table.names) == ["a.csv", "c.csv"]
