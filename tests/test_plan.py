"""A bench on paper: limits known from theory, derivatives, and that the fit keeps the promise."""

import copy
import json
from dataclasses import replace

import numpy as np
import pytest
from conftest import BENCH

from scatterfit import cli
from scatterfit.files_simulate import simulate
from scatterfit.forward.simulate import Scenario
from scatterfit.inversion.information import fisher_information
from scatterfit.inversion.problem import evaluate, shifted, value_of
from scatterfit.measured_pulse import best_settings, expected, plan
from scatterfit.measured_pulse.measure import measure
from scatterfit.report.plan import outcome_to_dict, plan_text

NOISY = Scenario(5e8, rate=5e3, noise=0.05, floor=0.01)
"""A pulse whose noise is far above the digitizer's step and the allowance for the model."""
FAST = replace(NOISY, rate=20e3)
"""The same, sampled so often that the pressure is known the same from half as many samples."""
STATED = {"angle_deg_sigma": 0.1, "gain_V_m_sigma": 1.8e3}


def noise_of(found, name="final_radius_um"):
    """Return the part of a sigma that the noise makes, over the value."""
    value = outcome_to_dict(plan.Outcome({}, found))[name]
    return value["sigma_statistical"] / value["value"]


def line_of(found, quantity, name):
    """Return one line's sigma of a budget over the quantity's value."""
    value = outcome_to_dict(plan.Outcome({}, found))[quantity]["value"]
    return sum(line.sigma for line in found.pulse.budget
               if (line.quantity, line.input) == (quantity, name)) / value


@pytest.fixture(scope="module")
def expect(store):
    """Return a function that plans a bench without looking for rivals."""
    return lambda bench, pulse, rivals=False: expected.expect(bench, pulse, store, rivals)


@pytest.fixture(scope="module")
def problem_at(store):
    """Return a function that gives the problem of a bench and its true cloud."""
    kept = []

    def keep(problem, cloud, channels, rivals=()):
        kept.append((problem, cloud))
        return real(problem, cloud, channels, rivals)

    real = expected.fit_at_truth

    def make(bench, pulse):
        with pytest.MonkeyPatch.context() as patch:
            patch.setattr(expected, "fit_at_truth", keep)
            expected.expect(bench, pulse, store, rivals=False)
        return kept[-1]

    return make


@pytest.fixture
def paper(store):
    """Return the plain bench on paper."""
    return plan.Paper(copy.deepcopy(BENCH), NOISY, "bench.toml", store, rivals=False)


# Against a slow calculation, and against theory.


def test_derivatives_are_those_of_slow_central_differences(make_bench, problem_at):
    problem, cloud = problem_at(make_bench(detector=STATED), NOISY)
    free = replace(problem, priors={})
    jacobian = evaluate(free, cloud).jacobian
    steps = {"number": 0.02, "scale": 0.002, "delay": 2e-6, "variance": 2e-6, "bend": 2e-3,
             "angle:0": 2e-4}
    assert set(steps) <= set(problem.names)
    for name, step in steps.items():
        here = value_of(cloud, name)
        high, low = (evaluate(free, shifted(cloud, [name], [here + sign * step]),
                              derivatives=False).residual for sign in (1.0, -1.0))
        slow = (high - low) / (2.0 * step)
        column = jacobian[:, problem.names.index(name)]
        # Derivatives of growth are one-sided differences over a percent or so.
        assert np.linalg.norm(column - slow) < 0.03 * np.linalg.norm(slow), name


def test_information_adds_up_over_samples_and_goes_with_one_over_noise_squared(
        make_bench, problem_at):
    # Without a gauge the births do not hang on how the pressure is sampled.
    bench = make_bench(
        detector={"gain_V_m": None}, transmission=None, pressure=None,
        growth={"temperature_K": 268.0, "pressure_kPa": 70.0},
        pulse={"hold_ms": 1.0, "temperature_K": 240.0, "pressure_kPa": 52.0})
    once = fisher_information(*problem_at(bench, FAST))
    twice = fisher_information(*problem_at(bench, replace(FAST, rate=2 * FAST.rate)))
    quieter = fisher_information(*problem_at(
        bench, replace(FAST, noise=0.5 * FAST.noise, floor=0.5 * FAST.floor)))
    names = problem_at(bench, FAST)[0].names
    for name in ("scale", "number", "variance", "delay"):
        i = names.index(name)
        assert twice[i, i] / once[i, i] == pytest.approx(2.0, rel=0.01)
        assert quieter[i, i] / once[i, i] == pytest.approx(4.0, rel=0.01)
    assert np.linalg.eigvalsh(once).min() > -1e-9 * np.linalg.eigvalsh(once).max()


def test_sigma_falls_as_the_root_of_the_samples_and_with_the_noise(make_bench, expect):
    bench = make_bench(detector={"gain_V_m": None}, transmission=None)
    once = noise_of(expect(bench, FAST))
    assert noise_of(expect(bench, replace(FAST, rate=2 * FAST.rate))) == pytest.approx(
        once / np.sqrt(2.0), rel=0.05)
    louder = replace(FAST, noise=2.0 * FAST.noise, floor=2.0 * FAST.floor)
    assert noise_of(expect(bench, louder)) == pytest.approx(2.0 * once, rel=0.08)


def test_a_wide_cloud_has_the_textbook_share_of_the_angle(make_bench, expect):
    """Where all lobes are those of x sin(theta / 2), dr/r = dtheta / (2 tan(theta / 2)).

    A narrow cloud shows ripple that does not hang on the angle: its radius depends less on it.
    """
    at = {"angle_deg": 60.0, "half_angle_deg": 0.5, "angle_deg_sigma": 0.1}
    bench = make_bench(detector=at, transmission=None)
    pulse = Scenario(5e8, rate=5e3, noise=0.02, floor=0.005)
    textbook = np.radians(0.1) / (2.0 * np.tan(np.radians(30.0)))
    angle = ("final_radius_um", "detector.scatter1_V.angle_deg")
    wide = expect(bench, replace(pulse, cloud={"variance": 2e-3}))
    assert line_of(wide, *angle) == pytest.approx(textbook, rel=0.15)
    assert outcome_to_dict(plan.Outcome({}, wide))["limited_by"]["radius"] == "angle"
    assert line_of(expect(bench, pulse), *angle) < 0.1 * textbook


def test_counting_is_one_over_the_root_of_the_droplets_in_view(make_bench, expect):
    seen = [expect(make_bench(detector={"volume_mm3": volume}), NOISY) for volume in (1.0, 4.0)]
    lines = [line_of(one, "concentration_per_cm3", "counting of droplets") for one in seen]
    # 500 droplets per cm3 and 1 mm3: half a droplet in view.
    assert lines == pytest.approx([1.0 / np.sqrt(0.5), 1.0 / np.sqrt(2.0)], rel=1e-2)
    tight = expect(make_bench(detector={"volume_mm3": 100.0}), NOISY)
    assert outcome_to_dict(plan.Outcome({}, tight))["limited_by"]["number"] == "counting"


def test_a_second_detector_never_hurts_and_helps(make_bench, expect, paper):
    bench, pulse = plan.bench_and_pulse(paper, {"added.angle_deg": 90.0})
    assert [d.column for d in bench.detectors] == ["scatter1_V", plan.ADDED_COLUMN]
    assert bench.detectors[1].gain is None
    assert noise_of(expect(bench, pulse)) < 0.9 * noise_of(expect(make_bench(), pulse))


def test_rivals_come_nearer_with_one_over_noise_squared(make_bench, expect):
    bench = make_bench(detector={"gain_V_m": None, "angle_deg": 60.0}, transmission=None)
    pulses = [Scenario(5e7, rate=5e3, noise=noise, floor=0.1 * noise) for noise in (0.35, 0.7)]
    near = [expect(bench, pulse, rivals=True) for pulse in pulses]
    assert near[0].rival / near[1].rival == pytest.approx(4.0, rel=0.15)
    radius = near[0].pulse.final_radius.value
    # Peaks of sin(theta / 2) r lie half a wavelength over 2 sin(theta / 2) apart, in the liquid's
    # surroundings: half of 532 nm at 60 degrees; the rival is one lobe away or less.
    others = [abs(other.final_radius - radius) for other in near[0].pulse.alternatives]
    assert 0.02 * radius < min(others) < 0.532e-6


# What is promised is what a fit gives.


def test_the_fit_quotes_what_the_plan_says_and_scatters_by_it(make_bench, store, expect):
    bench = make_bench(detector=STATED, analysis={"max_radius_um": 2.0})
    pulse = replace(NOISY, duration=0.08)
    how = {"number": pulse.number, "duration": pulse.duration, "rate": pulse.rate,
           "noise": pulse.noise, "store": store}
    said = expect(bench, replace(pulse, floor=Scenario(1.0).floor))
    made = simulate(bench, count=10, seed=3, **how)
    fits = [measure(bench, one.time, one.columns, store=store) for one in made]
    for name in best_settings.QUANTITIES:
        mine = best_settings.quantity_of(said, name)
        theirs = [best_settings.quantity_of(expected.Expectation(fit, {}), name) for fit in fits]
        quoted = np.median([one.sigma / one.value for one in theirs])
        assert quoted == pytest.approx(mine.sigma / mine.value, rel=0.15), name
    radii = np.array([fit.final_radius.value for fit in fits]) / said.pulse.final_radius.value
    scatter = np.sqrt(np.mean((radii - 1.0) ** 2)) / noise_of(said)
    # Ten errors: chi-square of ten degrees of freedom is in 2.16 to 25.2 in 99 of 100 cases.
    assert np.sqrt(2.16 / 10.0) < scatter < np.sqrt(25.2 / 10.0)


def test_what_cannot_be_seen_is_said(make_bench, expect):
    dark = expect(make_bench(), Scenario(1e2, noise=0.01))
    assert dark.pulse.final_radius is None or dark.pulse.verdict != "rejected"
    only = make_bench(detector=[], analysis={"max_radius_um": 3.0})
    faint = expect(only, Scenario(1e7))
    assert faint.pulse.verdict == "rejected"
    assert faint.pulse.final_radius is None
    assert faint.pulse.upper_limit > 1e6
    dry = expect(make_bench(vapour={"mole_fraction": 0.006}), NOISY)
    assert [reason.code for reason in dry.pulse.reasons] == ["never-supersaturated"]


# Settings, search, and the command.


def test_the_best_settings_lie_within_limits_and_come_first(paper):
    limits = {"noise": (0.02, 0.15), "rate_khz": (2.0, 6.0)}
    wanted = ("final_radius", "growth_rate")
    found = best_settings.search_best(paper, limits, wanted, 10)
    merits = [best_settings.merit(one, wanted) for one in found]
    assert merits == sorted(merits)
    assert all(low <= one.setting[key] <= high for one in found
               for key, (low, high) in limits.items())
    # Least noise and most samples is best: the search has to go there.
    assert found[0].setting["noise"] < 0.04
    assert found[0].setting["rate_khz"] > 3.5


def test_a_verdict_goes_before_a_sigma():
    def made(verdict, sigma):
        quantity = best_settings.quantity_of
        pulse = replace(expected.MeasuredPulse("", verdict),
                        final_radius=expected_quantity(1.0, sigma))
        assert quantity(expected.Expectation(pulse, {}), "final_radius").sigma == sigma
        return plan.Outcome({}, expected.Expectation(pulse, {}))

    order = [made("accepted", 0.2), made("ambiguous", 0.01), made("rejected", 0.001),
             plan.Outcome({}, None, "cannot be")]
    merits = [best_settings.merit(one, ("final_radius",)) for one in order]
    assert merits == sorted(merits)


def expected_quantity(value, sigma):
    """Return a quantity."""
    from scatterfit.measured_pulse.record import Quantity

    return Quantity(value, sigma)


@pytest.fixture
def chamber(tmp_path):
    """Return a chamber file."""
    path = tmp_path / "bench.toml"
    path.write_text("""
[beam]
wavelength_nm = 532.0
polarization = "perpendicular"
[[detector]]
column = "scatter1_V"
angle_deg = 30.0
half_angle_deg = 2.0
[pressure]
column = "pressure_kPa"
[vapour]
substance = "water"
mole_fraction = 0.0085
[gas]
carrier = "argon"
[chamber]
temperature_K = 297.0
pressure_kPa = 90.0
""")
    return path


QUICK = ["--rate-khz", "5", "--number", "500", "--duration-ms", "60"]


def test_the_command_prints_tables_json_and_a_figure(chamber, tmp_path, capsys):
    figure = tmp_path / "plan.png"
    vary = ["--vary", "noise=0.01:0.1:2", "--figure", str(figure)]
    assert cli.main(["plan", str(chamber), *QUICK, *vary]) == 0
    text = capsys.readouterr().out
    for word in ("ACCEPTED", "µm s⁻¹", "peaks and troughs", "limits radius; number", "Best"):
        assert word in text
    assert "nan" not in text
    assert figure.stat().st_size > 10_000
    within = ["--within", "noise=0.01:0.1", "--tries", "4", "--for", "radius", "--json"]
    assert cli.main(["plan", str(chamber), *QUICK, *within]) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["schema"] == "scatterfit-plan-1"
    size = len(found["information"]["parameters"])
    assert np.array(found["information"]["matrix"]).shape == (size, size)
    assert found["best"]["tried"] == 4
    assert found["best"]["wanted"] == ["final_radius_um"]
    radius = found["base"]["final_radius_um"]
    assert radius["sigma"] == pytest.approx(
        np.hypot(radius["sigma_statistical"], radius["sigma_systematic"]), rel=1e-4)
    assert found["base"]["concentration_per_cm3"] is None
    assert "no number" in found["base"]["limited_by"]["also"]


@pytest.mark.parametrize(("words", "said"), [
    (["--vary", "noise"], "KEY=LOW:HIGH[:STEPS] is needed"),
    (["--vary", "noise=0.1:0.01"], "second value must be above"),
    (["--vary", "noise=0.01:0.1:1"], "2 to 50 steps"),
    (["--within", "noise=0.01:0.1:5"], "KEY=LOW:HIGH is needed"),
    (["--vary", "nosie=0.01:0.1"], "did you mean noise"),
    (["--vary", "detector.scatter_V.angle_deg=20:40"], "scatter1_V"),
    (["--vary", "detector.scatter1_V.angle_deg=20:400"], "400"),
    (["--vary", "vapour.substance=1:2"], "vapour.substance"),
    (["--vary", "noise=0.01:7"], "can be planned"),
    (["--figure", "plan.gif"], "a figure ends in"),
    (["--for", "beauty"], "known are radius, growth, number, rate"),
    (["--set", "vapour.mole_fraction=0.0005"], "no hold pressure gives"),
    (["--rate-khz", "0.1", "--duration-ms", "10"], "samples"),
    (["--set", "chamber.pressure_kPa=oops"], "chamber.pressure_kPa"),
])
def test_a_wrong_command_is_one_line_and_exit_2(chamber, capsys, words, said):
    assert cli.main(["plan", str(chamber), *words]) == 2
    shown = capsys.readouterr()
    assert shown.out == ""
    assert said in shown.err
    assert shown.err.count("\n") == 1


def test_a_plan_without_anything_to_say_is_text_too():
    base = outcome_to_dict(plan.Outcome({}, None, "cannot be"))
    pulse = {"number": 5.0, "duration_ms": 100.0, "rate_khz": 1.0, "noise": 0.01}
    nothing = {"chamber": "b.toml", "pulse": pulse, "base": base, "sweeps": [],
               "best": {"settings": []}}
    assert "cannot be" in plan_text(nothing)
