"""Benches with several beams: the file, cross sections on one grid, signals, one fit of all."""

import copy
import math

import miepython
import numpy as np
import pytest
from conftest import BENCH
from scipy.interpolate import CubicSpline

from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.overrides import check_override
from scatterfit.cli_check import check_text
from scatterfit.cloud_optics.beams import build_bench_kernel
from scatterfit.cloud_optics.build import build_kernel
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.errors import ChamberFileError
from scatterfit.files_simulate import simulate
from scatterfit.forward.growth_model import Cloud
from scatterfit.forward.model import channel_signals
from scatterfit.forward.simulate import pressure_profile
from scatterfit.measured_pulse.measure import measure
from scatterfit.measured_pulse.prepare import prepare, pulse_kernel, pulse_model

GREEN = {"name": "green", "wavelength_nm": 532.0, "polarization": "perpendicular"}
RED = {"name": "red", "wavelength_nm": 632.8, "polarization": "perpendicular"}
TURNED = {"name": "turned", "wavelength_nm": 532.0, "polarization": "parallel"}
TIME = np.arange(-5e-3, 0.06, 2e-4)
BASE_SPREAD = 0.003


def detector(beam=None, **changes):
    """Return a detector's table."""
    table = {"column": f"{beam or 'scatter'}_V", "angle_deg": 30.0, "half_angle_deg": 2.0,
             "full_scale_V": 10.0, **changes}
    return table if beam is None else {**table, "beam": beam}


def transmission(beam, **changes):
    """Return the transmission's table."""
    return {"column": "transmitted_V", "path_mm": 120.0, "beam": beam, **changes}


@pytest.fixture(scope="module")
def colours():
    """Return the mapping of a bench with two colours."""
    return {
        **copy.deepcopy(BENCH), "beam": [GREEN, RED],
        "detector": [detector("red", gain_V_m=5e4), detector("green", gain_V_m=6e4),
                     detector("red", column="side_V", angle_deg=70.0)],
        "transmission": transmission("red", half_angle_deg=0.5),
        "vapour": {"substance": "water", "mole_fraction": 0.0085},
        "analysis": {"max_radius_um": 1.6},
    }


# The chamber file.


def changed(mapping, path, value):
    """Return a copy of a mapping with the value at a path of keys and positions replaced."""
    mapping = copy.deepcopy(mapping)
    *way, last = path
    content = mapping
    for step in way:
        content = content[step]
    if value is None:
        del content[last]
    else:
        content[last] = value
    return mapping


def test_each_channel_knows_its_beam(colours):
    bench = apparatus_from_mapping(changed(colours, ("beam", 1, "wavelength_nm_sigma"), 0.1))
    assert [beam.name for beam in bench.beams] == ["green", "red"]
    assert [bench.beam_number(one) for one in bench.detectors] == [1, 0, 1]
    assert bench.beam_number(bench.transmission) == 1
    assert bench.beam is bench.beams[0]
    assert bench.sigmas == {"beam.red.wavelength_nm": pytest.approx(1e-10)}


@pytest.mark.parametrize("beam", [GREEN, [GREEN], [changed(GREEN, ("name",), None)]])
def test_one_beam_may_be_written_either_way(beam):
    mapping = {**copy.deepcopy(BENCH), "beam": beam}
    bench = apparatus_from_mapping(mapping)
    assert bench.beams == (bench.beam,)
    assert bench.beam.wavelength == 532e-9
    for path in ("beam.wavelength_nm", "beam.green.wavelength_nm")[: 1 + ("name" in str(beam))]:
        again = apparatus_from_mapping(apply_overrides(mapping, {path: 500.0}))
        assert again.beam.wavelength == 500e-9


MISTAKES = {
    "unknown": (("detector", 0, "beam"), "rad",
                'bench.toml: detector.red_V.beam = "rad": no beam has this name; did you mean '
                "red?"),
    "nothing near": (("transmission", "beam"), "violet", "known are green, red"),
    "none named": (("detector", 1, "beam"), None,
                   "bench.toml: detector.green_V.beam is missing: the bench has several beams, "
                   "green, red; say whose light this is"),
    "transmission names none": (("transmission", "beam"), None, "transmission.beam is missing"),
    "same name": (("beam", 1, "name"), "green", "beam[2].name = \"green\": another beam has this"),
    "no name": (("beam", 1, "name"), None, "beam[2].name is missing"),
    "empty": (("beam",), [], "beam = []: write it as one table, [beam], or as several, [[beam]]"),
    "without several": (("beam",), changed(GREEN, ("name",), None),
                        'detector.red_V.beam = "red": the one [beam] has no name; leave this key'),
    "unseen": (("detector", 1, "beam"), "red", "no detector and no transmission names this beam"),
    "one index": (("vapour", "refractive_index"), 1.3368,
                  "vapour.refractive_index = 1.3368: the beams differ in wavelength"),
    "key": (("beam", 1, "wavelenght_nm"), 600.0,
            "beam.red.wavelenght_nm = 600.0: unknown key; did you mean wavelength_nm?"),
    "value": (("beam", 1, "wavelength_nm"), -1.0, "beam.red.wavelength_nm = -1.0: must be"),
    "monitor": (("reference",), {"column": "monitor_V", "beam": "rad"},
                'reference.beam = "rad": no beam has this name; did you mean red?'),
}


@pytest.mark.parametrize("name", MISTAKES)
def test_a_mistake_gets_one_line(colours, name):
    path, value, text = MISTAKES[name]
    with pytest.raises(ChamberFileError) as caught:
        apparatus_from_mapping(changed(colours, path, value), "bench.toml")
    assert text in str(caught.value)
    assert "\n" not in str(caught.value)


def test_an_index_is_said_once(colours):
    same = changed(colours, ("beam", 1, "wavelength_nm"), 532.0)
    stated = changed(same, ("vapour", "refractive_index"), 1.3368)
    assert apparatus_from_mapping(stated).vapour.refractive_index == 1.3368
    twice = changed(stated, ("beam", 1, "refractive_index"), 1.332)
    with pytest.raises(ChamberFileError, match=r"beam\.red\.refractive_index says the same"):
        apparatus_from_mapping(twice)


def test_a_pulse_may_have_its_own_beam(colours):
    again = apply_overrides(colours, {"beam.red.wavelength_nm": 650.0})
    assert apparatus_from_mapping(again).beams[1].wavelength == 650e-9
    assert colours["beam"][1]["wavelength_nm"] == 632.8
    for path, text in (
        ("beam.wavelength_nm", "write beam.green.wavelength_nm or beam.red.wavelength_nm"),
        ("beam.rod.wavelength_nm", "no beam is named rod; did you mean red?"),
    ):
        with pytest.raises(ChamberFileError, match=text):
            apply_overrides(colours, {path: 650.0})
    with pytest.raises(ChamberFileError, match=r"there is one beam: write beam\.wavelength_nm"):
        apply_overrides(BENCH, {"beam.red.wavelength_nm": 650.0})
    with pytest.raises(ChamberFileError, match=r"did you mean beam\.red\.wavelength_nm\?"):
        check_override("beam.red.wavelenght_nm", 1.0, "--set")


# Cross sections and signals.


@pytest.fixture(scope="module")
def optics(colours, store):
    """Return the setup of a pulse in two colours, its kernel, indices and model."""
    bench = apparatus_from_mapping(colours)
    setup = growth_setup(bench, TIME, pressure_profile(TIME, (9e4, 55e3, 70e3), 1e-3))
    kernel, relative, _ = pulse_kernel(setup, store)
    return setup, kernel, relative, pulse_model(setup, kernel, relative, (0.0, 0.0, 0.0))


def test_joined_tables_are_those_of_each_colour_alone(colours, optics, store):
    """The first colour's to the bit, the other's by a cubic spline on its own grid."""
    _, kernel, relative, _ = optics
    joined = kernel.at(relative)
    for number, row in ((0, 1), (1, 0)):
        beam = colours["beam"][number]
        alone = {**colours, "beam": beam, "detector": [
            changed(colours["detector"][row], ("beam",), beam["name"])]}
        alone["transmission"] = transmission(beam["name"], half_angle_deg=0.5)
        gas = kernel.kernels[number].wavenumber * beam["wavelength_nm"] * 1e-9 / (2 * np.pi)
        table = build_kernel(apparatus_from_mapping(alone), gas, relative[number], store).at(
            relative[number])
        grid = table.log_radius_start + table.step * np.arange(table.extinction.size)
        inner = np.log(joined.radius)
        for ours, curve in ((joined.collected[row], table.collected[0]),
                            (joined.extinction[number], table.extinction)):
            expected = CubicSpline(grid, curve / np.exp(4 * grid))(inner) * np.exp(4 * inner)
            # Square metres: all of them are below pytest's own absolute tolerance.
            close = {"rel": 1e-12 if number == 0 else 2e-5, "abs": 0.0}
            assert ours == pytest.approx(expected, **close)
    lost = table.extinction - table.forward
    large = inner > np.log(2e-7)
    found = joined.lost[large]
    assert found == pytest.approx(CubicSpline(grid, lost)(inner[large]), rel=2e-5, abs=0.0)
    assert joined.radius[-1] >= 1.6e-6


def cone_light(index, sizes, wavenumber, cone):
    """Return light in a cone [m^2] for light perpendicular to the plane, by miepython alone.

    Directions of the cone one by one: the scattering angle theta, and by how far the plane of
    scattering is turned, as cos^2 and sin^2 between the amplitudes S1 and S2.
    """
    middle, half = np.radians(cone)
    nodes, weights = np.polynomial.legendre.leggauss(12)
    tilt = half * (nodes + 1) / 2
    turn = np.linspace(0, 2 * np.pi, 24, endpoint=False)
    tilt, turn = (v.ravel() for v in np.meshgrid(tilt, turn, indexing="ij"))
    solid = np.repeat(weights * half / 2 * 2 * np.pi / 24, 24) * np.sin(tilt)
    # A direction at (tilt, turn) about the axis, in coordinates: beam z, plane x and z, field y.
    x = np.sin(middle) * np.cos(tilt) + np.cos(middle) * np.sin(tilt) * np.cos(turn)
    y = np.sin(tilt) * np.sin(turn)
    z = np.cos(middle) * np.cos(tilt) - np.sin(middle) * np.sin(tilt) * np.cos(turn)
    out = x**2 / (x**2 + y**2)
    light = []
    for size in sizes:
        s1, s2 = miepython.S1_S2(complex(index).conjugate(), size, z, norm="wiscombe")
        light.append(solid @ (np.abs(s1) ** 2 * out + np.abs(s2) ** 2 * (1 - out)))
    return np.array(light) / wavenumber**2


def test_signals_of_two_colours_against_miepython(optics):
    """Each channel as n C exp(-n C_ext path) of its own beam, with miepython's cross sections."""
    _, kernel, relative, model = optics
    cloud = Cloud(number=math.log(3e10), variance=1e-5, angles=(0.0, 0.0, 0.0))
    signals, state = channel_signals(model, cloud, TIME)
    nodes, weights = np.polynomial.hermite_e.hermegauss(10)
    spread = np.exp(math.hypot(BASE_SPREAD, math.sqrt(1e-5)) * nodes)
    weights = weights / weights.sum()
    shares, apart = state.growth.weights, []
    for moment in (100, 320):
        density = state.number_density[moment]
        radii = (state.radius[:, moment, None] * spread).ravel()
        mix = (shares[:, None] * weights).ravel()
        loss = []
        for optic, index in zip(kernel.kernels, relative, strict=True):
            sizes = radii * optic.wavenumber
            area = [math.pi * r**2 * miepython.efficiencies_mx(complex(index).conjugate(), x)[0]
                    for r, x in zip(radii, sizes, strict=True)]
            loss.append(float(mix @ np.array(area)))
        for row, (beam, cone, gain) in enumerate(
                [(1, (30.0, 2.0), 5e4), (0, (30.0, 2.0), 6e4), (1, (70.0, 2.0), 1.0)]):
            optic = kernel.kernels[beam]
            light = mix @ cone_light(relative[beam], radii * optic.wavenumber, optic.wavenumber,
                                     cone)
            expected = gain * density * light * math.exp(-density * loss[beam] * 0.12)
            assert signals[row].shape[moment] == pytest.approx(expected, rel=2e-3), (row, moment)
        depth = -math.log(signals[3].shape[moment])
        # The receiver's half degree takes back less than a percent at these sizes.
        assert depth == pytest.approx(density * loss[1] * 0.12, rel=1e-2)
        apart.append(loss[0] / loss[1] - 1)
    assert np.abs(apart).max() > 0.1, "the colours must differ for this to tell anything"


def test_two_beams_alike_give_what_one_gives(store):
    """A bench with a beam written twice, one detector on each, against the plain one."""
    plain = {**copy.deepcopy(BENCH), "analysis": {"max_radius_um": 1.6},
             "detector": [detector(gain_V_m=6e4), detector(column="side_V", angle_deg=70.0)]}
    twice = {**copy.deepcopy(plain), "beam": [GREEN, {**GREEN, "name": "too"}],
             "transmission": transmission("too")}
    for table, name in zip(twice["detector"], ("green", "too"), strict=True):
        table["beam"] = name
    plain, twice = apparatus_from_mapping(plain), apparatus_from_mapping(twice)
    pulse = simulate(plain, store=store, rate=10e3, seed=4)[0]
    again = simulate(twice, store=store, rate=10e3, seed=4)[0]
    for name, values in pulse.columns.items():
        assert again.columns[name] == pytest.approx(values, rel=1e-9, abs=1e-12)
    one, two = (measure(bench, pulse.time, pulse.columns, store=store).to_dict()
                for bench in (plain, twice))
    assert two["verdict"] == one["verdict"] == "accepted"
    for key in ("final_radius_um", "concentration_per_cm3", "growth_scale"):
        assert two[key] == pytest.approx(one[key], rel=1e-6), key
    assert two["optical_depth"] == pytest.approx(one["optical_depth"], rel=1e-6)
    assert set(two["provenance"]["refractive_index"]) == {"green", "too"}


# Simulate, then fit.


ROUND_TRIPS = {
    "two colours": ([GREEN, RED], [detector("green", gain_V_m=6e4), detector("red")],
                    transmission("red")),
    "two polarizations": ([GREEN, TURNED], [
        detector("green", angle_deg=60.0, gain_V_m=6e5),
        detector("turned", angle_deg=60.0)], None),
    "scatter in one colour, transmission in another": (
        [GREEN, RED], [detector("green")], transmission("red")),
}


@pytest.mark.parametrize("name", ROUND_TRIPS)
def test_simulated_pulses_come_back(store, name):
    beams, detectors, through = ROUND_TRIPS[name]
    mapping = {**copy.deepcopy(BENCH), "beam": beams, "detector": detectors,
               "analysis": {"max_radius_um": 1.6},
               "vapour": {"substance": "water", "mole_fraction": 0.0085}}
    del mapping["transmission"]
    if through is not None:
        mapping["transmission"] = through
    bench = apparatus_from_mapping(mapping)
    pulse = simulate(bench, store=store, rate=10e3, seed=5)[0]
    result = measure(bench, pulse.time, pulse.columns, store=store).to_dict()
    assert result["verdict"] == "accepted"
    for key, truth in (("final_radius_um", pulse.truth["final_radius_um"]),
                       ("concentration_per_cm3", pulse.truth["N_per_cm3"])):
        found = result[key]
        assert abs(found["value"] - truth) < 3 * found["sigma"], key
    assert result["final_radius_um"]["sigma"] < 1e-3


def test_a_second_colour_resolves_what_one_leaves_open(store):
    """Red light near the forward direction, 30 ms and 15 percent noise: several radii do.

    tests/studies/add_measurement.py has more draws, and other things that one may add.
    """
    blue = {**GREEN, "name": "blue", "wavelength_nm": 405.0}
    both = {**copy.deepcopy(BENCH), "beam": [RED, blue],
            "detector": [detector("red", angle_deg=15.0), detector("blue", angle_deg=15.0)],
            "vapour": {"substance": "water", "mole_fraction": 0.0085, "mole_fraction_sigma": 3e-4},
            "analysis": {"max_radius_um": 1.2}}
    del both["transmission"]
    both["chamber"]["temperature_K_sigma"] = 0.5
    alone = {**both, "beam": RED, "detector": both["detector"][:1]}
    bench = apparatus_from_mapping(both)
    pulse = simulate(bench, store=store, rate=10e3, seed=1, noise=0.15, duration=0.03)[0]
    one = measure(apparatus_from_mapping(alone), pulse.time, pulse.columns, store=store)
    two = measure(bench, pulse.time, pulse.columns, store=store)
    assert (one.verdict, two.verdict) == ("ambiguous", "accepted")
    assert "ambiguous-lobe" in {reason.code for reason in one.reasons}
    truth = pulse.truth["final_radius_um"] * 1e-6
    assert abs(two.final_radius.value - truth) < 3 * two.final_radius.sigma
    assert two.final_radius.sigma < 0.2 * one.final_radius.sigma


def test_a_monitor_of_one_beam_leaves_the_other_alone(store):
    mapping = {**copy.deepcopy(BENCH), "beam": [GREEN, {**TURNED, "name": "red"}],
               "detector": [detector("green"), detector("red")],
               "analysis": {"max_radius_um": 1.6},
               "reference": {"column": "monitor_V", "beam": "red"}}
    del mapping["transmission"]
    bench = apparatus_from_mapping(mapping)
    pulse = simulate(bench, store=store, rate=10e3, seed=5)[0]
    columns = {**pulse.columns, "monitor_V": 2.0 * (1 + 0.05 * np.sin(300 * pulse.time))}
    green, red = prepare(bench, pulse.time, columns, store).channels
    assert green.signal == pytest.approx(pulse.columns["green_V"])
    assert red.signal != pytest.approx(pulse.columns["red_V"], rel=1e-2)


def test_check_shows_every_beam(tmp_path):
    path = tmp_path / "two.toml"
    path.write_text("""
[[beam]]
name = "green"
wavelength_nm = 532.0
polarization = "perpendicular"
[[beam]]
name = "red"
wavelength_nm = 632.8
polarization = "unpolarized"
refractive_index = 1.332
[[detector]]
column = "scatter_V"
beam = "red"
angle_deg = 30.0
half_angle_deg = 2.0
[transmission]
column = "through_V"
beam = "green"
path_mm = 120.0
[vapour]
substance = "water"
mole_fraction = 0.0085
[gas]
carrier = "argon"
[chamber]
temperature_K = 297.0
[pressure]
column = "pressure_kPa"
[analysis]
max_radius_um = 1.5
""", encoding="utf-8")
    text = check_text(path)
    for part in ("laser green", "laser red", "632.8 nm in vacuum, unpolarized",
                 "red, 30 ± 2 degrees", "green, path 120 mm", "refractive index, green",
                 "refractive index, red       1.332"):
        assert part in text, part


def test_kernels_of_both_beams_are_kept(colours, optics):
    """The store holds each colour's nodes: nothing is built a second time."""
    setup, _, relative, _ = optics

    class Full:
        def __init__(self):
            self.kept = {}

        def load(self, key):
            return self.kept.get(key)

        def save(self, key, arrays):
            self.kept[key] = dict(arrays)

    store = Full()
    bench = apparatus_from_mapping(changed(colours, ("analysis", "max_radius_um"), 1.0))
    assert setup.apparatus.other_beams
    build_bench_kernel(bench, (1.0, 1.0), relative, store)
    count = len(store.kept)
    assert count == 8
    build_bench_kernel(bench, (1.0, 1.0), relative, store)
    assert len(store.kept) == count
