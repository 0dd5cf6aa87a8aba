"""Compiled loops against the array code, which is the reference: the same to the last digits."""

from dataclasses import fields, replace

import numpy as np
import pytest

import scatterfit
from scatterfit import files_compiled
from scatterfit.compiled import compiled, use_compiled
from scatterfit.droplet_growth import cloud as growth
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.files import write_trace
from scatterfit.files_trace import Trace
from scatterfit.forward.growth_model import Cloud, linear_growth, per_mole
from scatterfit.forward.model import channel_signals
from scatterfit.forward.simulate import pressure_profile
from scatterfit.measured_pulse.prepare import pulse_kernel, pulse_model
from scatterfit.overnight import batch
from scatterfit.overnight.jobs import Plan
from scatterfit.report.template import chamber_template

TIME = np.arange(-5e-3, 0.1, 1e-4)
NAMES = ("number", "scale", "delay", "variance", "accommodation", "temperature", "vapour", "bend",
         "creep", "stretch", "angle:0", "tilt:0")
DETECTORS = [
    {"column": "scatter1_V", "angle_deg": 30.0, "half_angle_deg": 2.0, "gain_V_m": 6e4,
     "time_constant_ms": 0.2, "angle_deg_sigma": 0.1},
    {"column": "scatter2_V", "angle_deg": 90.0, "half_angle_deg": 3.0},
]
SEED = {"diameter_nm": 30.0}


@pytest.fixture(scope="module", autouse=True)
def loaded(kernel_cache):  # noqa: ARG001  (compiled code is kept with the kernels)
    """Load the loops once, and leave the array code in force."""
    files_compiled.load_compiled.cache_clear()
    assert files_compiled.load_compiled()
    use_compiled(False)
    yield
    use_compiled(False)


def both(work):
    """Return what some work gives by the array code and by compiled loops."""
    found = []
    for on in (False, True):
        use_compiled(on)
        assert compiled() is on
        found.append(work())
    use_compiled(False)
    return found


@pytest.fixture(scope="module")
def models(make_bench, store):
    """Return models of pulses with births over a hold, and on seeds."""
    def made(**changes):
        bench = make_bench(detector=DETECTORS, transmission={"half_angle_deg": 1.0}, **changes)
        setup = growth_setup(bench, TIME, pressure_profile(TIME, (9e4, 55e3, 70e3), 1e-3))
        kernel, relative, _ = pulse_kernel(setup, store)
        return pulse_model(setup, kernel, relative, (0.0, 0.0))

    return {"hold": made(), "seeds": made(seed=SEED)}


CLOUD = Cloud(number=np.log(8e9), variance=2e-5, angles=(4e-4, 0.0))
CLOUDS = {
    "where growth was solved": CLOUD,
    "followed to first order": replace(
        CLOUD, number=CLOUD.number + 0.1, scale=0.02, delay=3e-5, variance=2.3e-5, bend=0.01,
        creep=-0.01, accommodation=-0.1, depletion=0.03, stretch=0.05),
    "too far for first order": replace(CLOUD, scale=30.0),
}


@pytest.mark.parametrize("kind", ["hold", "seeds"])
@pytest.mark.parametrize("where", CLOUDS)
def test_signals_and_their_derivatives(models, kind, where):
    model = models[kind]
    cloud = CLOUDS[where]
    linear = linear_growth(model.setup, CLOUD, NAMES)
    near = channel_signals(model, CLOUD, TIME, (), linear)[1].table
    (plain, _), (quick, _) = both(
        lambda: channel_signals(model, cloud, TIME, NAMES, linear, near))
    assert len(quick) == len(model.channels) == 3
    for a, b in zip(plain, quick, strict=True):
        top = np.abs(a.shape).max()
        assert top > 0.0
        assert b.shape == pytest.approx(a.shape, rel=1e-11, abs=1e-12 * top)
        for name in a.by:
            size = np.abs(a.by[name]).max()
            there = b.by.get(name, np.zeros_like(top))
            assert np.broadcast_to(there, TIME.shape) == pytest.approx(
                a.by[name], rel=1e-9, abs=1e-10 * size), name


@pytest.mark.parametrize("kind", ["hold", "seeds"])
def test_signals_without_derivatives(models, kind):
    model = models[kind]
    linear = linear_growth(model.setup, CLOUD, ("number", "scale"))
    cloud = replace(CLOUD, scale=0.01, variance=3e-5)
    (plain, _), (quick, _) = both(lambda: channel_signals(model, cloud, TIME, (), linear))
    for a, b in zip(plain, quick, strict=True):
        assert b.shape == pytest.approx(a.shape, rel=1e-11)
        assert b.by == {}


GROWN = {
    "thin": {"number": 1e8},
    "shares of every parameter": {"number": 3e9, "scale": 1.1, "sticking": [1.0, 0.3],
                                  "factor": 1.003, "bend": 0.05, "creep": -0.03},
    "so thick that the gas relaxes between nodes": {"number": 1e13},
}


@pytest.mark.parametrize("name", GROWN)
def test_growth(models, name):
    setup = models["hold"].setup
    given = GROWN[name]
    parameters = growth.CloudParameters(
        per_mole(setup, np.log(given["number"])), np.array([given.get("scale", 1.0), 1.0]),
        np.array(given.get("sticking", [1.0, 1.0])), 1.0, setup.vapour_fraction,
        given.get("factor", 1.0), given.get("bend", 0.0), given.get("creep", 0.0))
    births = setup.births.times, setup.births.weights
    plain, quick = both(lambda: growth.solve_cloud(
        setup.properties, setup.path, births, parameters))
    assert quick.converged == plain.converged
    for field in fields(plain):
        a, b = getattr(plain, field.name), getattr(quick, field.name)
        size = np.abs(a).max() if isinstance(a, np.ndarray) else 0.0
        assert b == pytest.approx(a, rel=1e-10, abs=1e-12 * size), field.name


@pytest.mark.parametrize("damping", [1.0, 1e3])
def test_uptake_by_both_of_its_ways(damping):
    """In closed form, and node by node where that would overflow."""
    from scatterfit.droplet_growth import rounds_compiled

    generator = np.random.default_rng(3)
    time = np.linspace(0.0, 1.0, 40) ** 2
    error, gain = generator.standard_normal((2, 40)), generator.uniform(0.5, 1.0, (2, 40))
    response = -damping * generator.uniform(0.5, 1.0, (2, 40))
    expected = growth._coupled(error, gain, response, np.diff(time))
    found = rounds_compiled._coupled(error, gain, response, time)
    assert np.abs(expected).max() > 0.1
    assert found == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_a_cloud_that_cannot_be_is_not_called_solved(models):
    """What is not a number stays so, and is no place in a table."""
    setup = models["hold"].setup
    parameters = growth.CloudParameters(np.nan, 1.0, 1.0, 1.0, setup.vapour_fraction, 1.0)
    births = setup.births.times, setup.births.weights
    use_compiled(True)
    found = growth.solve_cloud(setup.properties, setup.path, births, parameters)
    use_compiled(False)
    assert not found.converged
    assert np.isnan(found.temperature).any()


def test_a_whole_fit(make_bench):
    bench = make_bench(detector=DETECTORS)
    pulse = scatterfit.simulate(bench, count=1, number=2e9, seed=5)[0]
    trace = Trace("p1.csv", pulse.time, pulse.columns, tuple(pulse.columns))
    plain, quick = both(lambda: scatterfit.fit(bench, trace))
    assert plain.verdict == quick.verdict == "accepted"
    for a, b in ((plain.final_radius, quick.final_radius),
                 (plain.concentration, quick.concentration)):
        assert b.value == pytest.approx(a.value, abs=1e-3 * a.sigma)
        assert b.sigma == pytest.approx(a.sigma, rel=1e-3)


def test_a_batch_of_many_traces_uses_them_and_gives_the_same_numbers(tmp_path, monkeypatch):
    chamber, folder = tmp_path / "bench.toml", tmp_path / "night"
    chamber.write_text(chamber_template(), encoding="utf-8")
    folder.mkdir()
    bench = scatterfit.read_chamber(chamber)
    for i, pulse in enumerate(scatterfit.simulate(bench, count=2, number=2e9, rate=1e4, seed=8)):
        write_trace(folder / f"p{i}.csv", pulse.time, pulse.columns)
    found = {}
    for many in (2, 3):
        monkeypatch.setattr(batch, "MANY", many)
        ledger = tmp_path / f"{many}.sqlite"
        batch.run_batch(Plan(chamber, folder), ledger, batch.Choice(workers=1))
        found[many] = [scatterfit.open_results(ledger).pulse(f"p{i}.csv").to_dict()
                       for i in range(2)]
    for quick, plain in zip(found[2], found[3], strict=True):
        assert "numba" in quick["provenance"]["versions"]
        assert "numba" not in plain["provenance"]["versions"]
        for key in ("final_radius_um", "concentration_per_cm3"):
            assert quick[key]["value"] == pytest.approx(plain[key]["value"], rel=1e-7)


def test_loading_compiles_what_fits_use():
    """Each loop has one signature: nothing is compiled again in the middle of a night."""
    from scatterfit.droplet_growth import rounds_compiled
    from scatterfit.forward import light_compiled

    counts = {name: len(part.signatures)
              for module in (rounds_compiled, light_compiled)
              for name, part in vars(module).items() if hasattr(part, "signatures")}
    for name in ("rounds", "_cross_sections", "_density", "_channel"):
        assert counts[name] == 1, name


def test_without_a_folder_for_compiled_code_the_array_code_goes_on(monkeypatch):
    files_compiled.load_compiled.cache_clear()
    monkeypatch.setattr(files_compiled, "default_store",
                        lambda: type("Nowhere", (), {"folder": None}))
    assert not files_compiled.load_compiled()
    files_compiled.load_compiled.cache_clear()


@pytest.mark.parametrize("error", [ImportError, AttributeError, OSError])
def test_without_a_sound_numba_the_array_code_goes_on(monkeypatch, error):
    """A module of another name in the way once broke its import with an AttributeError."""
    def missing(_folder):
        raise error

    files_compiled.load_compiled.cache_clear()
    monkeypatch.setattr(files_compiled, "_load", missing)
    assert not files_compiled.load_compiled()
    files_compiled.load_compiled.cache_clear()
