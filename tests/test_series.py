"""What pulses of a bench share: the joint estimate, its parts, and the command."""

import json
import tomllib
from dataclasses import replace

import numpy as np
import pytest

from scatterfit import files
from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.cli import main
from scatterfit.cli_demo import BENCH
from scatterfit.errors import ChamberFileError, InvalidInputError
from scatterfit.files_chamber import revised_chamber
from scatterfit.files_simulate import simulate
from scatterfit.inversion import uncertainty
from scatterfit.inversion.problem import Evaluation
from scatterfit.measured_series.answer import Answer, answer, followed
from scatterfit.measured_series.calibrate import calibrate
from scatterfit.measured_series.choice import before_of, chosen, sigmas_of, unknowns_of
from scatterfit.measured_series.drift import gain_drift
from scatterfit.measured_series.informed import accommodation_notes, not_separated
from scatterfit.measured_series.joint import Joint, _judged
from scatterfit.measured_series.look import SeriesPulse, first_look
from scatterfit.measured_series.placing import value_in, with_value
from scatterfit.measured_series.unknowns import KINDS, Unknown, kind_of

GAIN, ANGLE = "detector.scatter1_V.gain_V_m", "detector.scatter1_V.angle_deg"
WARMTH = "chamber.temperature_K"
TRUTH = {GAIN: 6.9e4, ANGLE: np.radians(30.4), WARMTH: 297.4}
NUMBERS = (1e8, 2e10, 4e8, 1e10)


@pytest.fixture(scope="module")
def stated(make_bench):
    """Return the plain bench with sigmas."""
    return make_bench(
        detector={"gain_V_m_sigma": 1.2e4, "angle_deg_sigma": 0.3},
        transmission={"path_mm_sigma": 2.0}, chamber={"temperature_K_sigma": 0.4},
        vapour={"mole_fraction_sigma": 1e-4},
    )


@pytest.fixture(scope="module")
def pulses(stated, store):
    """Return pulses of a bench that is not what its file says."""
    true = stated
    for key, value in TRUTH.items():
        true = with_value(true, key, value)
    found = []
    for i, number in enumerate(NUMBERS):
        one = simulate(true, count=1, number=number, seed=i, rate=10e3, duration=0.08,
                       store=store)[0]
        found.append(SeriesPulse(f"p{i}.csv", stated, one.time, one.columns))
    return found


def settings(store, count):
    return {"store": store, "map": map, "progress": lambda *_: None, "axis": "pulse",
            "places": {f"p{i}.csv": float(i) for i in range(count)}}


@pytest.mark.slow
def test_a_bench_that_is_off_is_brought_back(stated, pulses, store):
    """Gain by 15 percent, angle by 0.4 degrees, temperature by 0.4 K, planted by simulation."""
    found, joint = calibrate(stated, pulses, chosen(stated), settings(store, len(pulses)))
    assert found.converged
    for shared in found.shared:
        if shared.key in TRUTH:
            truth = TRUTH[shared.key] if shared.unit != "deg" else np.degrees(TRUTH[shared.key])
            assert abs(shared.after - truth) < 2.5 * shared.sigma
    by_key = {shared.key: shared for shared in found.shared}
    assert by_key[GAIN].narrowed < 0.15
    assert by_key[ANGLE].narrowed < 0.05
    # The thin pulses take their number from the gain that the thick ones fix: before, 15 percent.
    for row, number in zip(found.rows, NUMBERS, strict=True):
        assert abs(row.number[0] / number - 1.0) < 0.03
        assert abs(row.number[0] / number - 1.0) < 3.0 * row.number[1] / row.number[0]
    # Temperature and vapour act nearly alike on growth and depletion: that is said, not hidden.
    assert any({p.first, p.second} == {WARMTH, "vapour.mole_fraction"} for p in found.pairs)
    assert np.all(np.linalg.eigvalsh(joint.covariance) > 0.0)
    assert json.dumps(found.to_dict(), allow_nan=False)


@pytest.mark.slow
def test_pulses_of_two_benches_are_not_averaged(store):
    """Between two pulses a gain was trebled: no chamber file would be right for both."""
    bench = apparatus_from_mapping(tomllib.loads(BENCH))
    forward, side = bench.detectors
    pair = []
    for i, (number, gain) in enumerate(((5e9, 1e5), (2.5e10, 3e5))):
        real = replace(bench, detectors=(forward, replace(side, gain=gain)))
        one = simulate(real, count=1, number=number, seed=i, rate=10e3, duration=0.08,
                       store=store)[0]
        pair.append(SeriesPulse(f"p{i}.csv", bench, one.time, one.columns))
    choice = chosen(bench, ("detector.side_V.gain_V_m",), ())
    with pytest.raises(InvalidInputError, match=r"do not share one bench.*times theirs"):
        calibrate(bench, pair, choice, settings(store, 2))


@pytest.mark.slow
def test_gradient_and_information_are_those_of_refits(stated, pulses, store):
    """A slow direct computation: chi-square of the pulse fitted anew at neighbouring benches."""
    choice = chosen(stated)
    warm = first_look(pulses[1], sigmas_of(stated, choice), store).warm
    warm = replace(warm, apparatus=replace(warm.apparatus, detectors=stated.detectors))
    unknowns = unknowns_of(stated, choice, [warm], {})
    x = np.array([0.14 if u.key == GAIN else 0.007 if u.key == ANGLE else 0.3 if u.key == WARMTH
                  else 0.0 for u in unknowns])
    here = answer(warm, unknowns, x, store)
    warm = replace(warm, cloud=here.cloud)
    for key, step in ((GAIN, 0.06), (WARMTH, 0.5), ("transmission.path_mm", 0.06)):
        k = [u.key for u in unknowns].index(key)
        shift = step * (np.arange(len(unknowns)) == k)
        sides = [answer(followed(warm, here, s * shift), unknowns, x + s * shift, store).chi2
                 for s in (-1.0, 1.0)]
        bend = (sides[0] + sides[1] - 2.0 * here.chi2) / (2.0 * step**2)
        assert bend == pytest.approx(here.information[k, k], rel=0.15)
        slope = (sides[1] - sides[0]) / (4.0 * step)
        assert slope == pytest.approx(
            here.gradient[k], abs=0.1 * here.information[k, k] * step)


def synthetic(gradient, information, name="p"):
    """Return an answer about two shared coordinates, nothing of its own."""
    return Answer(name, np.array(information), np.array(gradient), 0.0, 1.0, 1.0, None, (),
                  np.empty((0, 2)), 0.0, {}, 1e-6)


def test_a_pulse_that_disagrees_counts_less_and_is_named():
    """Five pulses that measure the same two numbers, and one that is ten sigmas away."""
    rng = np.random.default_rng(5)
    information = np.diag([100.0, 25.0])
    answers = [synthetic(np.sqrt(np.diag(information)) * rng.standard_normal(2), information)
               for _ in range(9)]
    weights, excess, scatter = _judged(answers, np.zeros(2), 1e-3 * np.eye(2))
    assert np.all(weights == 1.0)
    assert np.all(excess < 4.0)
    assert scatter < 1.6
    answers[4] = synthetic([100.0, 50.0], information)
    weights, excess, _ = _judged(answers, np.zeros(2), 1e-3 * np.eye(2))
    assert weights[4] < 0.4
    assert excess[4] > 4.0
    assert np.all(np.delete(excess, 4) < 4.0)


def test_drift_is_the_weighted_straight_line():
    """Against numpy.polyfit with weights, and chi-square of constancy by hand."""
    rng = np.random.default_rng(2)
    sigma = rng.uniform(0.01, 0.03, 12)
    relative = 0.01 * np.arange(12) + sigma * rng.standard_normal(12)
    answers = tuple(synthetic([-r / s**2, 0.0], np.diag([s**-2.0, 1.0]), f"p{i}")
                    for i, (r, s) in enumerate(zip(relative, sigma, strict=True)))
    joint = Joint(np.zeros(2), np.eye(2), np.eye(2), answers, np.ones(12), np.zeros(12), 1.0, 1,
                  True)
    unknowns = [Unknown(GAIN, kind_of(GAIN), 1.0, 1.0, True, True),
                Unknown(WARMTH, kind_of(WARMTH), 297.0, 1.0, True, True)]
    (found,) = gain_drift(joint, unknowns, {f"p{i}": float(i) for i in range(12)})
    slope, _ = np.polyfit(np.arange(12.0), relative, 1, w=1.0 / sigma)
    assert found.change == pytest.approx(11.0 * slope)
    mean = np.average(relative, weights=sigma**-2.0)
    assert found.chi2 == pytest.approx(np.sum(((relative - mean) / sigma) ** 2))
    assert found.probability < 1e-3
    assert 2.0 < found.change / found.change_sigma < 20.0


def test_what_is_not_told_apart_is_said_with_what_is_known():
    """The known combination against the eigenvector of the covariance with the least variance."""
    keys = ("vapour.mass_accommodation", "vapour.thermal_accommodation")
    unknowns = [Unknown(key, kind_of(key), 0.5, 3.0, False, True) for key in keys]
    sigma, rho = np.array([0.4, 0.8]), -0.999
    covariance = np.array([[1.0, rho], [rho, 1.0]]) * np.outer(sigma, sigma)
    joint = Joint(np.zeros(2), covariance, 9.0 * np.eye(2), (), np.ones(0), np.zeros(0), 1.0, 1,
                  True)
    (pair,) = not_separated(joint, unknowns)
    least = np.linalg.eigh(covariance)[1][:, 0]
    # Coordinates are of 1/alpha: at 0.5 each a quarter of it, and against it.
    assert (pair.first, pair.second) == keys[::-1]
    assert pair.correlation == pytest.approx(rho)
    assert pair.slope == pytest.approx(-least[0] / least[1], rel=0.01)
    assert pair.sigma == pytest.approx(0.25 * sigma[1] * np.sqrt(1.0 - rho**2))
    assert "cannot separate" in accommodation_notes(joint, unknowns)[0]
    apart = replace(joint, covariance=np.diag(sigma**2))
    assert not_separated(apart, unknowns) == ()
    assert "tell them apart" in accommodation_notes(apart, unknowns)[0]


def test_correlated_priors_enter_as_their_covariance():
    """Against the normal matrix with the inverse of the priors' covariance added, by hand."""
    rng = np.random.default_rng(1)
    data, sigmas, rho = rng.standard_normal((9, 3)), np.array([0.5, 2.0]), -0.8
    rows = np.zeros((2, 3))
    rows[0, 0], rows[1, 2] = 1.0 / sigmas
    wide = Evaluation(
        None, np.concatenate([rng.standard_normal(9), np.zeros(2)]), 0.0,
        np.vstack([data, rows]), (), np.empty(0))
    matrix = np.array([[1.0, rho], [rho, 1.0]])
    found = uncertainty._correlated(wide, {"a": 0, "c": 0}, (("a", "c"), matrix))
    precision = data.T @ data
    block = np.linalg.inv(matrix * np.outer(sigmas, sigmas))
    precision[np.ix_([0, 2], [0, 2])] += block
    assert found.jacobian.T @ found.jacobian == pytest.approx(precision)


def test_what_is_shared_is_what_is_stated_or_freed(stated, make_bench):
    assert set(chosen(stated).keys) == {GAIN, ANGLE, "transmission.path_mm",
                                        "vapour.mole_fraction", WARMTH}
    some = chosen(stated, free=["vapour.diffusivity_mm2_s"], hold=[ANGLE])
    assert ANGLE in some.held
    assert "vapour.diffusivity_mm2_s" in some.keys
    with pytest.raises(InvalidInputError, match="nothing to learn"):
        chosen(make_bench())
    with pytest.raises(InvalidInputError, match=r"did you mean chamber\.temperature_K"):
        chosen(stated, free=["chamber.temprature_K"])
    with pytest.raises(InvalidInputError, match="both free and held"):
        chosen(stated, free=[ANGLE], hold=[ANGLE])
    # A gain that is not stated at all is to be found.
    assert GAIN in chosen(make_bench(detector={"gain_V_m": None})).keys


def test_what_is_known_beforehand_is_the_file_s(stated):
    unknowns = [Unknown(key, kind_of(key), value_in(stated, key), s, True, True)
                for key, s in ((WARMTH, 0.4), ("vapour.mole_fraction", 0.01))]
    assert np.diag(before_of(stated, unknowns)) == pytest.approx([0.16, 1e-4])
    inverse = KINDS["vapour.mass_accommodation"]
    sticky = Unknown("vapour.mass_accommodation", inverse, 0.5, 0.1, True, True)
    assert sticky.at(2.0) == 0.25
    assert sticky.sigma_at(0.0, 0.1) == pytest.approx(0.5**2 * 0.1)


FILE = """\
# my bench
[beam]
wavelength_nm = 532.0 # green
polarization = "perpendicular"
[[detector]]
column = "side_V"
angle_deg = 90.0
half_angle_deg = 2.0
[[detector]]
column = "scatter1_V"
angle_deg = 30.0 # from the drawing
half_angle_deg = 2.0
gain_V_m = 6e4
[vapour]
substance = "water"
mole_fraction = 0.0085
[gas]
carrier = "argon"
[chamber]
temperature_K = 297.0
[pressure]
column = "pressure_kPa"
"""
CHANGES = {ANGLE: 30.4, f"{ANGLE}_sigma": 0.002, f"{WARMTH}_sigma": 0.1,
           "analysis.growth_scale": 1.01, "analysis.growth_scale_sigma": 0.01}


def test_a_revised_chamber_file_keeps_what_it_does_not_change():
    new = revised_chamber(FILE, CHANGES, ((ANGLE, WARMTH), ((1.0, 0.2), (0.2, 1.0))), ["a remark"])
    assert new.startswith("# calibrate: a remark\n# my bench\n")
    assert "angle_deg = 30.4 # from the drawing\nangle_deg_sigma = 0.002\n" in new
    assert "wavelength_nm = 532.0 # green" in new
    bench = apparatus_from_mapping(tomllib.loads(new))
    assert bench.detectors[0].angle == pytest.approx(np.pi / 2)
    assert bench.detectors[1].angle == pytest.approx(np.radians(30.4))
    assert bench.correlations.matrix[0][1] == 0.2
    # Once more: remarks and correlations of before go, nothing is there twice.
    again = revised_chamber(new, CHANGES, ((), ()), [])
    assert "calibrate" not in again
    assert "[correlations]" not in again
    assert tomllib.loads(again) == {k: v for k, v in tomllib.loads(new).items()
                                    if k != "correlations"}


def test_a_chamber_file_of_another_layout_is_written_anew():
    text = FILE.replace("[chamber]\ntemperature_K = 297.0\n", "").replace(
        "# my bench\n", "chamber = {temperature_K = 297.0} # inline\n")
    new = revised_chamber(text, CHANGES, ((), ()))
    bench = apparatus_from_mapping(tomllib.loads(new))
    assert bench.chamber.temperature == 297.0
    assert bench.sigmas[WARMTH] == 0.1


@pytest.mark.parametrize(("of", "matrix", "words"), [
    ([WARMTH, "vapour.mole_fraction"], [[1.0, 0.5]], "2 rows of 2"),
    ([WARMTH, "vapour.mole_fraction"], [[1.0, 0.5], [0.4, 1.0]], "symmetric"),
    ([WARMTH, "vapour.mole_fraction"], [[1.0, 1.5], [1.5, 1.0]], "between -1 and 1"),
    ([WARMTH, "vapour.mole_fraction"], [[0.9, 0.5], [0.5, 1.0]], "diagonal"),
    ([WARMTH, WARMTH], [[1.0, 0.5], [0.5, 1.0]], "once"),
    ([WARMTH, "beam.colour"], [[1.0, 0.5], [0.5, 1.0]], "beam.colour"),
    ([WARMTH, "detector.none_V.gain_V_m"], [[1.0, 0.5], [0.5, 1.0]], "none_V"),
    ([WARMTH, "vapour.mole_fraction", "chamber.path_mm"],
     [[1.0, 0.9, 0.9], [0.9, 1.0, -0.9], [0.9, -0.9, 1.0]], "negative variance"),
])
def test_correlations_that_cannot_be_are_refused(of, matrix, words):
    mapping = tomllib.loads(FILE) | {"correlations": {"of": of, "matrix": matrix}}
    with pytest.raises(ChamberFileError, match=words):
        apparatus_from_mapping(mapping)


@pytest.fixture
def folder(tmp_path, pulses):
    """Return a folder with a chamber file, a trace and one that is damaged."""
    text = FILE.replace(
        "gain_V_m = 6e4\n", "gain_V_m = 6e4\ngain_V_m_sigma = 6e3\nfull_scale_V = 10.0\n"
        "time_constant_ms = 0.02\n").replace(
        '[[detector]]\ncolumn = "side_V"\nangle_deg = 90.0\nhalf_angle_deg = 2.0\n', "").replace(
        "mole_fraction = 0.0085\n", "mole_fraction = 0.0085\nrefractive_index = 1.3368\n").replace(
        "297.0\n", "297.0\ntemperature_K_sigma = 0.4\npressure_kPa = 90.0\npath_mm = 120.0\n")
    text += "[transmission]\ncolumn = \"transmitted_V\"\npath_mm = 120.0\n"
    (tmp_path / "bench.toml").write_text(text, encoding="utf-8")
    night = tmp_path / "night"
    night.mkdir()
    for pulse in pulses[1:2]:
        files.write_trace(night / pulse.name, pulse.time, pulse.columns)
    (night / "p9.csv").write_text("time_ms,scatter1_V\n0,oops\n", encoding="utf-8")
    return tmp_path


@pytest.mark.slow
def test_the_command_writes_a_chamber_file_to_use(folder, capsys):
    words = [folder / "bench.toml", folder / "night", "--out", folder / "new.toml", "--json",
             "--jobs", "1", "--free", ANGLE, "--figure", folder / "series.png"]
    assert main(["calibrate", *map(str, words)]) == 0
    result = json.loads(capsys.readouterr().out)
    assert [row["used"] for row in result["traces"]] == [True, False]
    assert "oops" in result["traces"][1]["reasons"][0]["text"]
    assert any("one pulse alone" in note for note in result["notes"])
    bench = files.read_chamber(folder / "new.toml")
    after = {one["key"]: one["after"] for one in result["shared"]}
    assert bench.detectors[0].gain == pytest.approx(after[GAIN]["value"], rel=0.01)
    assert bench.sigmas[GAIN] == pytest.approx(after[GAIN]["sigma"], rel=0.01)
    assert bench.correlations.of == tuple(result["correlations"]["of"])
    assert (folder / "series.png").stat().st_size > 10_000
    from scatterfit.report.series import series_text

    text = series_text(result)
    assert GAIN in text
    assert "left out" in text


@pytest.mark.parametrize(("words", "code", "says"), [
    (["bench.toml", "empty"], 1, "no trace"),
    (["bench.toml", "nowhere"], 1, "cannot be read"),
    (["bench.toml", "night", "--free", "beam.wavelength_nm"], 1, "not a key that pulses share"),
    (["bench.toml", "night", "--hold", GAIN, "--hold", WARMTH], 1, "nothing to learn"),
    (["bench.toml", "night", "--out", "bench.toml"], 1, "the chamber file itself"),
    (["bench.toml", "night", "--out", "none/there.toml"], 1, "there is no folder"),
    (["missing.toml", "night"], 2, "cannot be read"),
    (["bench.toml", "night", "--figure", "a.gif"], 1, "a figure ends in"),
])
def test_wrong_input_is_one_line(folder, capsys, monkeypatch, words, code, says):
    (folder / "empty").mkdir()
    monkeypatch.chdir(folder)
    assert main(["calibrate", *words, "--jobs", "1"]) == code
    said = capsys.readouterr()
    assert says in said.err
    assert len(said.err.strip().splitlines()) == 1
    assert not said.out
