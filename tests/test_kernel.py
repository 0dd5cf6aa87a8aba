"""Kernel tables: averages, interpolation, spread, scale, store and extrema."""

import os
import subprocess
import sys
from dataclasses import FrozenInstanceError, replace
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.interpolate import CubicSpline
from scipy.special import j0, j1

from scatterfit.apparatus.records import (
    Analysis,
    Apparatus,
    Beam,
    Chamber,
    Detector,
    Transmission,
    Vapour,
)
from scatterfit.cloud_optics import build
from scatterfit.cloud_optics.aperture import cone_quadrature
from scatterfit.cloud_optics.build import build_kernel, check_node, node_key
from scatterfit.cloud_optics.extrema import kernel_extrema
from scatterfit.cloud_optics.node import Recipe, View, build_nodes, single_curves, table_count
from scatterfit.cloud_optics.single_droplet import scatter
from scatterfit.cloud_optics.table import (
    KernelTable,
    curves,
    interpolate,
    lagrange_weights,
    widen,
)
from scatterfit.errors import InvalidInputError, KernelError
from scatterfit.files_kernel import FolderStore, default_store

GAS_INDEX = 1.00027
WAVENUMBER = 2 * np.pi * GAS_INDEX / 532e-9


def bench(max_radius, polarization=np.pi / 2, angles=(30.0, 90.0), wavelength=532e-9):
    """Return a bench with detectors of one degree half angle and a receiver of one degree."""
    detectors = tuple(
        Detector(f"scatter{i}_V", np.radians(angle), np.radians(1.0))
        for i, angle in enumerate(angles)
    )
    return Apparatus(
        beam=Beam(wavelength, polarization),
        detectors=detectors,
        vapour=Vapour("water", saturation_ratio=0.9),
        carrier={"argon": 1.0},
        chamber=Chamber(298.0, 100e3),
        transmission=Transmission("transmitted_V", 0.3, np.radians(1.0)),
        analysis=Analysis(max_radius=max_radius),
    )


@pytest.fixture(scope="module")
def kernel():
    """Return a kernel to x = 105 whose first detector may turn by 0.4 degrees."""
    reach = [np.radians(0.4), 0.0]
    return build_kernel(bench(8.6e-6), GAS_INDEX, [1.3330, 1.3340], angle_reach=reach)


@pytest.fixture(scope="module")
def small():
    """Return a kernel to x = 12."""
    return build_kernel(bench(1e-6), GAS_INDEX, 1.3345)


def resolved_average(x, m, cones, spread, spacing):
    """Average single droplets over ln x on a grid that resolves all but the narrowest peaks."""
    sizes = np.arange(x * (1 - 5.5 * spread), x * (1 + 5.6 * spread), spacing)
    weights = np.exp(-((np.log(sizes / x) / spread) ** 2) / 2) / sizes
    weights /= weights.sum()
    light = scatter(sizes, m, np.concatenate([cone.angle for cone in cones]))
    found, start = [], 0
    for cone in cones:
        rows = slice(start, start + cone.angle.size)
        start += cone.angle.size
        found.append(cone.perpendicular @ (light.perpendicular[rows] @ weights))
        found[-1] += cone.parallel @ (light.parallel[rows] @ weights)
    found.append(np.pi * (sizes**2 * light.extinction_efficiency) @ weights)
    return np.array(found)


@pytest.mark.parametrize("x", [0.2, 3.0, 20.0, 40.0, 70.0, 100.0])
def test_table_against_resolved_averages(kernel, x):
    recipe = kernel.recipe
    cones = [cone_quadrature(np.radians(a), np.radians(1.0), np.pi / 2, 110.0) for a in (30, 90)]
    cones.append(cone_quadrature(0.0, np.radians(1.0), None, 110.0))
    point = int(np.searchsorted(recipe.size_parameter, x))
    m = (kernel.first_index + 1) * 1e-3
    expected = resolved_average(
        recipe.size_parameter[point], m, cones, recipe.spread, min(1.5e-4, 2e-4 * x)
    )
    table = kernel.at(m)
    found = [*table.collected[:, point], table.forward[point], table.extinction[point]]
    assert np.array(found) * WAVENUMBER**2 == pytest.approx(expected, rel=3e-4)


@pytest.mark.parametrize("m", [1.4, 1.5])
def test_table_of_other_liquids_to_the_back(m):
    axes, bars = (90.0, 120.0, 175.0), (1e-3, 1e-3, 4e-3, 1e-4)
    views = tuple(View(np.radians(axis), np.radians(1.0)) for axis in axes)
    recipe = Recipe(None, views, 0.0, 0.003, table_count(65.0, 0.003))
    (node,) = build_nodes(recipe, np.array([m]))
    for x in (30.0, 45.0, 60.0):
        point = int(np.searchsorted(recipe.size_parameter, x))
        size = recipe.size_parameter[point]
        expected = resolved_average(size, m, recipe.cones, recipe.spread, 1e-4)
        found = [*(light[0, point] for light in node.collected), node.extinction[point]]
        assert np.all(np.abs(found / expected - 1) < bars)


def test_widening_of_resonances_keeps_all_light():
    # two half spheres collect everything: for a droplet that does not absorb, the extinction
    half = np.pi / 2 - 1e-9
    recipe = Recipe(0.3, (View(0.0, half), View(np.pi, half)), 0.0, 0.003, table_count(45.0, 0.003))
    (node,) = build_nodes(recipe, np.array([1.45]))
    total = node.collected[0][0] + node.collected[1][0]
    assert total == pytest.approx(node.extinction, rel=2e-6)


def relative_errors(found, expected, recipe, x):
    """Return the largest relative errors within 5 percent of a size parameter, by row."""
    near = np.abs(np.log(recipe.size_parameter / x)) < 0.05
    return np.abs(found[:, near] / expected[:, near] - 1).max(axis=1)


def test_index_between_nodes(kernel):
    m = 1.33349
    (direct,) = build_nodes(kernel.recipe, np.array([m]))
    middle = direct.collected[0][2:3]
    rows = np.vstack([middle, direct.collected[1], direct.extinction, direct.forward])
    for spread, bars in ((0.003, (1e-4, 2e-4, 3e-4)), (0.02, (1e-6, 1e-5, 5e-5))):
        table = kernel.at(m, spread=spread)
        found = np.vstack([table.collected, table.extinction, table.forward]) * WAVENUMBER**2
        expected = widen(rows, kernel.recipe.step, kernel.recipe.spread, spread)
        for x, bar in zip((20.0, 50.0, 100.0), bars, strict=True):
            assert relative_errors(found, expected, kernel.recipe, x).max() < bar


def test_angle_between_nodes(kernel):
    shift = np.radians(0.27)
    view = replace(kernel.recipe.views[0], angle=np.radians(30.0) + shift, angle_step=0.0)
    m = (kernel.first_index + 1) * 1e-3
    (direct,) = build_nodes(replace(kernel.recipe, views=(view,)), np.array([m]))
    found = kernel.at(m, [shift, 0.0]).collected[:1] * WAVENUMBER**2
    for x, bar in ((20.0, 2e-6), (50.0, 1e-4), (100.0, 4e-4)):
        assert relative_errors(found, direct.collected[0], kernel.recipe, x).max() < bar


def test_derivatives_are_those_of_the_table(kernel):
    m, step, turn = 1.3334, 1e-5, 1e-6
    table = kernel.at(m, spread=0.02, derivatives=True)
    above, below = kernel.at(m + step, spread=0.02), kernel.at(m - step, spread=0.02)
    scale = table.extinction
    slope = (above.collected - below.collected) / (2 * step)
    assert np.abs(slope - table.d_collected_d_index).max(axis=1) == pytest.approx(
        0, abs=1e-6 * np.abs(slope).max()
    )
    slope = (above.extinction - below.extinction) / (2 * step)
    assert np.abs(slope - table.d_extinction_d_index) / scale == pytest.approx(0, abs=1e-5)
    above, below = kernel.at(m, [turn, 0], 0.02), kernel.at(m, [-turn, 0], 0.02)
    slope = (above.collected[0] - below.collected[0]) / (2 * turn)
    assert slope == pytest.approx(table.d_collected_d_angle[0], abs=1e-6 * np.abs(slope).max())
    assert not table.d_collected_d_angle[1].any()


@pytest.mark.parametrize("polarization", [np.pi / 2, 0.0, None])
def test_absolute_scale_in_square_metres_by_rayleigh(polarization):
    # Bohren and Huffman, equation 5.6: dC/dOmega = k^4 r^6 |(m^2-1)/(m^2+2)|^2 (1 or cos^2), and a
    # cloud's mean of r^6 is exp(18 s^2) of its median's
    kernel = build_kernel(bench(0.3e-6, polarization, (60.0,)), GAS_INDEX, 1.334)
    table = kernel.at(1.334)
    wave = 2 * np.pi * GAS_INDEX / 532e-9
    share = {np.pi / 2: 1.0, 0.0: 0.25, None: 0.625}[polarization]
    solid_angle = 2 * np.pi * (1 - np.cos(np.radians(1.0)))
    small = (1.334**2 - 1) / (1.334**2 + 2)
    expected = wave**4 * table.radius[0] ** 6 * small**2 * share * solid_angle
    assert table.collected[0, 0] == pytest.approx(expected * np.exp(18 * 0.003**2), rel=3e-3)
    assert table.radius[0] * wave == pytest.approx(0.05)


def test_absorbing_liquid(small):
    clear = small.at(1.334)
    kernel = build_kernel(bench(1e-6), GAS_INDEX, 1.334 + 1.004e-3j)
    assert kernel.absorption == pytest.approx(1.00e-3)
    dark = kernel.at(1.334 + 1e-3j)
    # a small sphere absorbs 4 x Im((m^2-1)/(m^2+2)) (Bohren and Huffman, equation 5.11)
    m = 1.334 + 1e-3j
    extra = np.pi * dark.radius[0] ** 2 * 4 * 0.05 * ((m**2 - 1) / (m**2 + 2)).imag
    assert dark.extinction[0] - clear.extinction[0] == pytest.approx(extra, rel=5e-3)


def test_faint_absorption_is_continuous():
    recipe = Recipe(None, (View(1.5, 0.02),), 0.0, 0.003, table_count(50.0, 0.003))
    (clear,) = build_nodes(recipe, np.array([1.4]))
    (faint,) = build_nodes(recipe, np.array([1.4 + 1e-12j]))
    assert faint.collected[0] == pytest.approx(clear.collected[0], rel=1e-6)


def test_receiver_collects_the_diffracted_light(kernel):
    # Rayleigh 1881 (Born and Wolf, section 8.5.2): of the light diffracted by a disk, half of the
    # extinction, 1 - J0^2 - J1^2 of (x sin theta) lies within theta
    table = kernel.at(1.3335, spread=0.03)
    radius = np.array([5e-6, 8e-6])
    reach = WAVENUMBER * radius * np.sin(np.radians(1.0))
    share = np.interp(radius, table.radius, table.forward / table.extinction)
    assert share == pytest.approx((1 - j0(reach) ** 2 - j1(reach) ** 2) / 2, rel=0.08)


def test_bench_without_detectors_or_receiver():
    only_beam = replace(bench(0.5e-6), detectors=(), transmission=Transmission("t_V", 0.5))
    table = build_kernel(only_beam, GAS_INDEX, 1.334).at(1.334)
    assert table.collected.shape == (0, table.extinction.size)
    assert not table.forward.any()


def test_kernel_refuses_what_it_was_not_built_for(small):
    low, high = small.index_range
    assert low <= 1.3345 <= high
    with pytest.raises(InvalidInputError, match=r"relative index 1\.36.*build the kernel for it"):
        small.at(1.36)
    with pytest.raises(InvalidInputError, match="angle shift of detector 1"):
        small.at(1.3345, [0.0, 0.001])
    with pytest.raises(FrozenInstanceError):
        small.absorption = 1.0


@pytest.mark.parametrize("index", [1.0, 1.33 - 0.1j, np.nan, []])
def test_impossible_index_is_refused(index):
    with pytest.raises(InvalidInputError, match="relative index"):
        build_kernel(bench(1e-6), GAS_INDEX, index)


def test_impossible_angle_reach_is_refused():
    with pytest.raises(InvalidInputError, match="angle reach"):
        build_kernel(bench(1e-6), GAS_INDEX, 1.333, angle_reach=-0.01)


# --- spread -----------------------------------------------------------------------------------


@settings(max_examples=20, deadline=None)
@given(st.floats(-1.0, 6.0), st.floats(0.004, 0.2))
def test_power_laws_widen_exactly(power, spread):
    # the mean of r^p over a lognormal of variance v is exp(p^2 v / 2) times that of the median
    grid = 0.0009 * np.arange(4000)
    rows = np.exp(power * grid)[None]
    factor = np.exp(power**2 * (spread**2 - 0.003**2) / 2)
    inner = slice(0, int(4000 - 7 * spread / 0.0009))
    assert (widen(rows, 0.0009, 0.003, spread) / rows)[0, inner] == pytest.approx(factor, rel=1e-7)


def test_widening_in_two_steps_is_widening_at_once(kernel):
    rows = kernel.at(1.3335).collected
    step, inner = kernel.recipe.step, slice(0, -400)
    twice = widen(widen(rows, step, 0.003, 0.02), step, 0.02, 0.05)
    once = widen(rows, step, 0.003, 0.05)
    assert twice[:, inner] == pytest.approx(once[:, inner], rel=1e-9)


def test_widening_against_a_direct_sum(kernel):
    table, wide = kernel.at(1.3335), kernel.at(1.3335, spread=0.03)
    extra = np.sqrt(0.03**2 - 0.003**2)
    steps = np.arange(-220, 221)
    weights = np.exp(-((steps * table.step / extra) ** 2) / 2)
    weights /= weights.sum()
    for point in (1000, 5000, 8000):
        expected = table.collected[:, point + steps] @ weights
        assert wide.collected[:, point] == pytest.approx(expected, rel=1e-9)
    assert wide.spread == 0.03
    assert kernel.at(1.3335, spread=0.001).spread == 0.003


# --- interpolation ------------------------------------------------------------------------------


def synthetic(count=400, step=0.01):
    """Return a table whose extinction is a known function, and the function and its slope."""
    table = KernelTable(-16.0, step, 0.003, np.empty((0, count)), np.ones(count), np.zeros(count))

    def value(u):
        return np.exp(2 * u) * (1.5 + np.sin(9 * u))

    def slope(u):
        return np.exp(2 * u) * (3 + 2 * np.sin(9 * u) + 9 * np.cos(9 * u))

    return table, value, slope


def test_interpolation_of_a_known_function():
    table, value, slope = synthetic()
    grid = table.log_radius_start + table.step * np.arange(400)
    rows = np.vstack([value(grid), np.ones(400)])
    where = np.linspace(grid[10], grid[-10], 3001)
    values, slopes = interpolate(curves(table, rows), where)
    assert values.shape == slopes.shape == (2, 3001)
    assert values[0] == pytest.approx(value(where), rel=2e-6)
    assert slopes[0] == pytest.approx(slope(where), abs=3e-4 * np.abs(slope(where)).max())
    assert values[1] == pytest.approx(1.0)


def test_interpolation_is_that_of_a_cubic_spline(kernel):
    table = kernel.at(1.3335)
    grid = table.log_radius_start + table.step * np.arange(table.extinction.size)
    where = np.random.default_rng(5).uniform(grid[50], grid[-50], 2000)
    values, slopes = interpolate(curves(table, table.collected), where)
    spline = CubicSpline(grid, table.collected, axis=1)
    assert values == pytest.approx(spline(where), rel=1e-6)
    assert slopes == pytest.approx(spline(where, 1), abs=1e-5 * np.abs(spline(where, 1)).max())


def test_interpolation_between_points_of_the_narrowest_table(kernel):
    # the table's spacing is 0.3 of its spread: compare with every second point left out
    table = kernel.at(1.3335)
    thinned = KernelTable(table.log_radius_start, 2 * table.step, 0.0, *[table.extinction[::2]] * 3)
    where = table.log_radius_start + table.step * np.arange(2001, 8001, 2)
    values, _ = interpolate(curves(thinned, table.collected[:, ::2]), where)
    # a spline errs as the fourth power: 16 times this error is 1.6e-3
    assert values == pytest.approx(table.collected[:, 2001:8001:2], rel=1.6e-3)


def test_outside_the_table():
    table, value, _ = synthetic()
    grid = table.log_radius_start + table.step * np.arange(400)
    read = curves(table, value(grid))
    where = np.array([-np.inf, grid[0] - 1.0, grid[0], grid[-1], grid[-1] + 1.0])
    (values,), (slopes,) = interpolate(read, where)
    assert values[0] == slopes[0] == 0.0
    assert values[1] == pytest.approx(value(grid[0]) * np.exp(-6.0))
    assert slopes[1] == pytest.approx(6 * values[1])
    assert values[2:] == pytest.approx(value(grid[[0, -1, -1]]))
    assert slopes[4] == 0.0
    assert read.log_radius_end == pytest.approx(table.log_radius_end) == grid[-1]


@given(st.floats(-2.0, 2.0))
def test_lagrange_weights_reproduce_cubics(position):
    nodes = np.array([-1.0, 0.0, 1.0, 2.0])
    weights = lagrange_weights(nodes, position)
    cubic = np.polynomial.Polynomial([0.3, -1.0, 2.0, 0.7])
    assert cubic(nodes) @ weights == pytest.approx([cubic(position), cubic.deriv()(position)])


# --- the independent check ----------------------------------------------------------------------


def test_check_passes_sound_nodes_and_stops_wrong_ones(small):
    recipe, node, m = small.recipe, small.nodes[0], small.first_index * 1e-3
    check_node(recipe, node, m)
    scaled = replace(node, extinction=node.extinction * (1 + 3e-5))
    with pytest.raises(KernelError, match="averages differ from miepython"):
        check_node(recipe, scaled, m)
    with pytest.raises(KernelError, match="differ from miepython"):
        check_node(recipe, node, m + 1e-4)
    moved = replace(node, collected=tuple(np.roll(axes, 1) for axes in node.collected))
    with pytest.raises(KernelError, match="averages"):
        check_node(recipe, moved, m)


def test_check_is_not_fooled_by_narrow_ripple(make_bench):
    """Backward light of a large index: three droplets would miss the average by 6e-4 here."""
    bench = make_bench(
        beam={"wavelength_nm": 450.0}, detector={"angle_deg": 135.03, "half_angle_deg": 1.61},
        analysis={"max_radius_um": 1.01})
    kernel = build_kernel(bench, 1.0002, 1.406, angle_reach=np.radians(0.6))
    assert len(kernel.nodes) >= 4


def test_check_stops_a_wrong_series(small, monkeypatch):
    def swapped(recipe, index, sizes):
        turned = replace(recipe, polarization=0.0)
        return single_curves(turned, index, sizes)

    monkeypatch.setattr(build, "single_curves", swapped)
    with pytest.raises(KernelError, match="single droplets"):
        check_node(small.recipe, small.nodes[0], small.first_index * 1e-3)


# --- the store ----------------------------------------------------------------------------------


def refuse(*_):
    """Stand in for the builder where nothing may be built."""
    message = "a node was built though the store had it"
    raise AssertionError(message)


def test_second_kernel_comes_from_the_store(tmp_path, monkeypatch):
    store = FolderStore(tmp_path / "deep" / "folder")
    first = build_kernel(bench(0.2e-6), GAS_INDEX, 1.3345, store)
    monkeypatch.setattr(build, "build_nodes", refuse)
    again = build_kernel(bench(0.2e-6), GAS_INDEX, 1.3347, store)
    assert np.array_equal(first.at(1.3346).collected, again.at(1.3346).collected)
    names = sorted(path.name for path in store.folder.iterdir())
    assert len(names) == 4
    assert all(name.endswith(".npz") for name in names)
    # another gas density or wavelength is the same in size parameters
    longer = bench(0.2e-6 * 633 / 532, wavelength=633e-9)
    other = build_kernel(longer, GAS_INDEX, 1.3345, store).at(1.3345)
    assert other.extinction == pytest.approx(first.at(1.3345).extinction * (633 / 532) ** 2)


def test_only_missing_nodes_are_built(tmp_path, monkeypatch):
    store = FolderStore(tmp_path)
    build_kernel(bench(0.2e-6), GAS_INDEX, 1.3345, store)
    built = []
    monkeypatch.setattr(
        build, "build_nodes", lambda recipe, m: built.append(m) or build_nodes(recipe, m)
    )
    build_kernel(bench(0.2e-6), GAS_INDEX, [1.3345, 1.3361], store)
    assert np.concatenate(built) == pytest.approx([1.337, 1.338])


@pytest.mark.parametrize(
    "change",
    [
        {"polarization": None},
        {"views": (View(0.5, 0.01), View(0.6, 0.01))},
        {"views": (View(0.5, 0.01, 0.003),)},
        {"forward_half_angle": 0.01},
        {"spread": 0.004},
        {"count": 128},
    ],
)
def test_key_depends_on_every_input(change):
    recipe = Recipe(0.0, (View(0.5, 0.01),), 0.0, 0.003, 64)
    key = node_key(recipe, 1333, 0.0)
    assert node_key(replace(recipe, **change), 1333, 0.0) != key
    assert node_key(recipe, 1333, 1e-6) != key
    assert node_key(Recipe(0.0, (View(0.5, 0.01),), 0.0, 0.003, 64), 1333, 0.0) == key


def test_key_depends_on_the_version(monkeypatch):
    recipe = Recipe(0.0, (View(0.5, 0.01),), 0.0, 0.003, 64)
    key = node_key(recipe, 1333, 0.0)
    monkeypatch.setattr(build, "KERNEL_VERSION", build.KERNEL_VERSION + 1)
    assert node_key(recipe, 1333, 0.0) != key


def spoil_by_cutting(path):
    path.write_bytes(path.read_bytes()[:-2000])


def spoil_by_emptying(path):
    path.write_bytes(b"")


def spoil_by_flipping(path):
    damaged = bytearray(path.read_bytes())
    damaged[len(damaged) // 2] ^= 0xFF
    path.write_bytes(bytes(damaged))


def spoil_by_another_format(path):
    np.savez(path, key=np.array(path.stem), extinction=np.array([None], dtype=object))


def spoil_by_not_a_number(path):
    arrays = dict(np.load(path))
    arrays["extinction"][3] = np.nan
    np.savez(path, **arrays)


def spoil_by_another_length(path):
    arrays = {
        name: array[..., :-1] if array.ndim else array for name, array in np.load(path).items()
    }
    np.savez(path, **arrays)


def spoil_by_another_key(path):
    arrays = dict(np.load(path)) | {"key": np.array("0" * 40)}
    np.savez(path, **arrays)


def spoil_by_a_folder(path):
    path.unlink()
    path.mkdir()


@pytest.mark.parametrize(
    "spoil",
    [
        spoil_by_cutting,
        spoil_by_emptying,
        spoil_by_flipping,
        spoil_by_another_format,
        spoil_by_not_a_number,
        spoil_by_another_length,
        spoil_by_another_key,
        spoil_by_a_folder,
    ],
)
def test_damaged_file_is_built_again(tmp_path, spoil):
    store = FolderStore(tmp_path)
    first = build_kernel(bench(0.05e-6), GAS_INDEX, 1.3345, store).at(1.3345)
    path = sorted(tmp_path.iterdir())[1]
    sound = path.read_bytes()
    spoil(path)
    again = build_kernel(bench(0.05e-6), GAS_INDEX, 1.3345, store).at(1.3345)
    assert again.collected == pytest.approx(first.collected, rel=1e-12)
    if spoil is not spoil_by_a_folder:
        assert len(path.read_bytes()) == len(sound)
    assert not list(tmp_path.glob(".*"))


def test_folder_that_cannot_be_written(tmp_path):
    # a file in the way of the folder: the same for a superuser, whom permissions do not stop
    (tmp_path / "file").write_text("in the way")
    store = FolderStore(tmp_path / "file" / "cache")
    assert build_kernel(bench(0.05e-6), GAS_INDEX, 1.3345, store).at(1.3345).extinction[0] > 0
    assert store.load("0" * 40) is None


def test_disk_that_fills_up_leaves_nothing(tmp_path, monkeypatch):
    def full(*_, **__):
        message = "No space left on device"
        raise OSError(message)

    monkeypatch.setattr(np, "savez", full)
    FolderStore(tmp_path).save("a" * 40, {"extinction": np.zeros(3)})
    assert not list(tmp_path.iterdir())


@settings(max_examples=60, deadline=None)
@given(place=st.floats(0, 1, exclude_max=True), flip=st.integers(1, 255), cut=st.booleans())
def test_no_damage_to_a_file_stops_the_program(tmp_path_factory, place, flip, cut):
    store, key = FolderStore(tmp_path_factory.getbasetemp() / "damage"), "a" * 40
    store.save(key, {"extinction": np.arange(9.0), "forward": np.arange(9.0)})
    path = store.folder / f"{key}.npz"
    damaged = bytearray(path.read_bytes())
    spot = int(place * len(damaged))
    damaged[spot] ^= flip
    path.write_bytes(bytes(damaged[:spot] if cut else damaged))
    found = store.load(key)
    assert found is None or all(np.array_equal(array, np.arange(9.0)) for array in found.values())


def test_old_files_make_room(tmp_path, monkeypatch):
    monkeypatch.setattr("scatterfit.files_kernel._MOST_FILES", 3)
    store = FolderStore(tmp_path)
    (tmp_path / "notes.npz").write_bytes(b"not ours")
    for number in range(5):
        store.save(f"{number:040x}", {"extinction": np.zeros(1)})
        os.utime(tmp_path / f"{number:040x}.npz", (number, number))
    kept = {path.name for path in tmp_path.iterdir()}
    assert kept == {"notes.npz", *(f"{number:040x}.npz" for number in (2, 3, 4))}


def test_place_of_the_store(tmp_path, monkeypatch):
    monkeypatch.setenv("SCATTERFIT_CACHE", str(tmp_path / "own"))
    assert default_store().folder == tmp_path / "own"
    monkeypatch.delenv("SCATTERFIT_CACHE")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    assert default_store().folder == tmp_path / "scatterfit"
    monkeypatch.delenv("XDG_CACHE_HOME")
    monkeypatch.delenv("LOCALAPPDATA", raising=False)

    def homeless():
        message = "Could not determine home directory."
        raise RuntimeError(message)

    monkeypatch.setattr("pathlib.Path.home", homeless)
    store = default_store()
    assert store.folder is None
    store.save("a" * 40, {"extinction": np.zeros(3)})
    assert store.load("a" * 40) is None


RACER = """
import sys
from scatterfit.apparatus.records import Analysis, Apparatus, Beam, Chamber, Detector, Vapour
from scatterfit.cloud_optics.build import build_kernel
from scatterfit.files_kernel import FolderStore
bench = Apparatus(
    Beam(5e-7, None), (Detector("a_V", 0.5, 0.02),), Vapour("water", 0.01), {}, Chamber(298.0),
    analysis=Analysis(max_radius=2e-8),
)
store = FolderStore(sys.argv[1])
for _ in range(2):
    for path in store.folder.glob("*.npz"):
        path.unlink(missing_ok=True)
    kernel = build_kernel(bench, 1.0, 1.3345, store)
print(repr(float(kernel.at(1.3345).extinction[10])))
"""


def test_two_processes_build_at_once(tmp_path):
    racers = [
        subprocess.Popen(
            [sys.executable, "-c", RACER, str(tmp_path)],
            stdout=subprocess.PIPE,
            stderr=subprocess.PIPE,
            text=True,
        )
        for _ in range(2)
    ]
    results = [racer.communicate(timeout=100) for racer in racers]
    assert [errors for _, errors in results] == ["", ""]
    assert results[0][0] == results[1][0]
    assert not list(tmp_path.glob(".*"))
    for path in tmp_path.iterdir():
        assert FolderStore(tmp_path).load(path.stem) is not None


# --- extrema ------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def red():
    """Return a table for water at 635 nm with a spread of 3 percent."""
    only = bench(3.5e-6, None, (30.0,), 635e-9)
    return build_kernel(only, GAS_INDEX, 1.3316).at(1.3316, spread=0.03)


def test_extinction_shoulders_of_water(red):
    # read off open recordings of a growing cloud at 635 nm: shoulders of r^2 Qext at 0.94, 1.9 and
    # 2.9 um, where it is 2.2, 8.3 and 18 um^2
    found = kernel_extrema(red, red.extinction, radius_range=(0.5e-6, 3.4e-6))
    assert {one.kind for one in found} == {"shoulder"}
    strongest = sorted(found, key=lambda one: -one.prominence)[:3]
    radii = sorted(one.radius * 1e6 for one in strongest)
    assert radii == pytest.approx([0.94, 1.9, 2.9], rel=0.02)
    values = sorted(one.value * 1e12 / np.pi for one in strongest)
    assert values == pytest.approx([2.2, 8.3, 18.0], rel=0.03)


def test_extinction_shoulders_against_anomalous_diffraction(red):
    # van de Hulst 1957, chapter 11: Q of 2x(m - 1), without the ripple and the edge term
    def falling(radius):
        shift = 2 * 2 * np.pi * GAS_INDEX / 635e-9 * radius * (1.3316 - 1)
        level = 2 - 4 / shift * np.sin(shift) + 4 / shift**2 * (1 - np.cos(shift))
        return np.gradient(np.log(radius**2 * level), np.log(radius))

    radius = np.geomspace(1.4e-6, 3.3e-6, 4000)
    slope = falling(radius)
    lows = np.flatnonzero((slope[1:-1] < slope[:-2]) & (slope[1:-1] < slope[2:])) + 1
    found = kernel_extrema(red, red.extinction, radius_range=(1.4e-6, 3.3e-6))
    assert [one.radius for one in found] == pytest.approx(radius[lows], rel=0.05)


def test_extrema_are_where_a_dense_search_finds_them(red):
    row = red.collected[0]
    found = kernel_extrema(red, row, radius_range=(0.4e-6, 3.0e-6))
    assert sum(one.kind == "maximum" for one in found) >= 5
    assert [one.radius for one in found] == sorted(one.radius for one in found)
    read = curves(red, row)
    for one in found:
        near = np.log(one.radius) + np.linspace(-1, 1, 2001) * 0.004
        values, slopes = (part[0] for part in interpolate(read, near))
        sought = {
            "maximum": values.argmax(),
            "minimum": values.argmin(),
            "shoulder": np.abs(slopes / values).argmin(),
        }[one.kind]
        if one.kind != "shoulder":
            assert near[sought] == pytest.approx(np.log(one.radius), abs=2e-5)
            assert values[sought] == pytest.approx(one.value, rel=1e-6)


def test_maxima_and_minima_alternate(red):
    kinds = [one.kind for one in kernel_extrema(red, red.collected[0]) if one.kind != "shoulder"]
    assert all(a != b for a, b in pairwise(kinds))


def test_shallow_pairs_become_shoulders(red):
    deep = kernel_extrema(red, red.collected[0], least_depth=0.5)
    all_of_them = kernel_extrema(red, red.collected[0], least_depth=0.001)
    assert sum(one.kind == "maximum" for one in deep) < sum(
        one.kind == "maximum" for one in all_of_them
    )
    assert sum(one.kind == "shoulder" for one in deep) > sum(
        one.kind == "shoulder" for one in all_of_them
    )


def test_smooth_curves_have_no_extrema(red):
    assert kernel_extrema(red, red.radius**2) == ()
    with pytest.raises(InvalidInputError, match="widen the range"):
        kernel_extrema(red, red.extinction, radius_range=(1e-6, 1.001e-6))
    with pytest.raises(InvalidInputError, match="positive curve"):
        kernel_extrema(red, -red.extinction)
