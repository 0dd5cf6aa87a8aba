"""The Lorenz-Mie series against printed tables, high-precision numbers, libraries and limits."""

import json
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from scatterfit.cloud_optics.aperture import cone_quadrature
from scatterfit.cloud_optics.series import size_blocks
from scatterfit.cloud_optics.single_droplet import amplitudes, coefficients, scatter
from scatterfit.errors import InvalidInputError

REFERENCE = Path(__file__).parents[2] / "shared" / "mie-reference.json"


# W. J. Wiscombe, NCAR Technical Note TN-140+STR (1979, revised 1996), table of test cases; his
# m = n - ik is n + ik here. Columns: m, x, Qext, Qsca. Case 6 has a slip in its
# sixth digit; case 11 stands among Du's below, 19 is left out as slow.
WISCOMBE = [
    (0.75, 0.099, 7.417859e-06, 7.417859e-06),
    (0.75, 0.101, 8.033542e-06, 8.033542e-06),
    (0.75, 10, 2.232265, 2.232265),
    (0.75, 1000, 1.997908, 1.997908),
    (1.33 + 1e-5j, 1, 9.395198e-02, 9.392330e-02),
    (1.33 + 1e-5j, 100, 2.101321, 2.096594),
    (1.5 + 1j, 0.055, 1.014910e-01, 1.131687e-05),
    (1.5 + 1j, 0.056, 1.033467e-01, 1.216311e-05),
    (1.5 + 1j, 1, 2.336321, 6.634538e-01),
    (1.5 + 1j, 100, 2.097502, 1.283697),
    (1.5 + 1j, 10000, 2.004368, 1.236574),
    (10 + 10j, 1, 2.532993, 2.049405),
    (10 + 10j, 100, 2.071124, 1.836785),
    (1.5, 10, 2.8820, 2.8820),  # the last four from the older edition of the note
    (1.5, 100, 2.0944, 2.0944),
    (1.5, 1000, 2.0139, 2.0139),
    (1.5, 5000, 2.0086, 2.0086),
]


@pytest.mark.published
@pytest.mark.parametrize(("m", "x", "extinction", "scattering"), WISCOMBE)
def test_wiscombe_1979_efficiencies(m, x, extinction, scattering):
    light = scatter([x], m, [0.0])
    digits = 3e-5 if m == 1.5 else 6e-7
    assert light.extinction_efficiency[0] == pytest.approx(extinction, rel=digits)
    assert light.scattering_efficiency[0] == pytest.approx(scattering, rel=digits)


# The same note: angle in degrees, Re S1, Im S1, Re S2, Im S2 with his sign of i.
WISCOMBE_AMPLITUDES = {
    (1.33 + 1e-5j, 1): [
        (0, 2.348800e-02, 2.281705e-01, 2.348800e-02, 2.281705e-01),
        (30, 2.341722e-02, 2.217102e-01, 2.034830e-02, 1.938171e-01),
        (60, 2.322408e-02, 2.046815e-01, 1.181704e-02, 1.075976e-01),
        (90, 2.296081e-02, 1.828349e-01, 2.729533e-04, 6.702879e-03),
        (120, 2.269820e-02, 1.625401e-01, -1.114466e-02, -7.646326e-02),
        (150, 2.250635e-02, 1.486170e-01, -1.942300e-02, -1.271557e-01),
        (180, 2.243622e-02, 1.437106e-01, -2.243622e-02, -1.437106e-01),
    ],
    (1.33 + 1e-5j, 100): [
        (0, 5253.302, -124.3188, 5253.302, -124.3188),
        (30, -55.34573, -29.71881, -84.67204, -19.99470),
        (60, 17.10488, -15.20096, 33.10764, -2.709787),
        (90, -3.655758, 8.769860, -6.550512, -4.675370),
        (120, 2.414318, 0.5380874, 6.039011, -11.69971),
        (150, -1.222996, 32.83917, -9.653812, 14.74455),
        (180, -56.59205, 46.50974, 56.59205, -46.50974),
    ],
    (1.33 + 1e-5j, 10000): [
        (0, 50102220, -153581.5, 50102220, -153581.5),
        (30, 3786.814, -7654.293, 5074.755, -7515.986),
        (60, -2731.172, 1326.633, -3076.558, -177.5975),
        (90, -1061.003, -193.0155, 243.0920, 84.09836),
    ],
    (0.75, 10): [
        (0, 55.80662, -9.758097, 55.80662, -9.758097),
        (30, -7.672879, 10.87317, -10.92923, 9.629667),
        (60, 3.587894, -1.756177, 3.427411, 0.08082691),
        (90, -1.785905, -0.05232828, -0.5148748, -0.7027288),
        (120, 1.537971, -0.08329374, -0.6908338, 0.2152693),
        (150, -0.4140427, 0.1876851, 0.5247557, -0.1923391),
        (180, -1.078568, -0.03608807, 1.078568, 0.03608807),
    ],
}


@pytest.mark.published
@pytest.mark.parametrize("case", WISCOMBE_AMPLITUDES, ids=str)
def test_wiscombe_1979_amplitudes(case):
    m, x = case
    angle, *parts = np.array(WISCOMBE_AMPLITUDES[case]).T
    printed = np.array([parts[0] - 1j * parts[1], parts[2] - 1j * parts[3]])
    found = np.array(amplitudes([x], m, np.radians(angle)))[..., 0]
    # seven digits are printed, of the larger of the two parts in the worst case
    assert np.abs(found - printed) == pytest.approx(0, abs=3e-7 * np.abs(printed).max())
    assert np.all(np.abs(found - printed) < 2e-6 * np.abs(printed))


# C. F. Bohren and D. R. Huffman (1983), appendix A: x of radius 0.525 um at 0.6328 um, m = 1.55.
# Angle in degrees, S11 over its forward value, POL = -S12/S11, S33/S11, S34/S11.
BOHREN_HUFFMAN = [
    (0, 1.00000e00, 0, 1.00000, 0),
    (9, 7.85390e-01, -0.00459811, 0.999400, 0.0343261),
    (18, 3.56897e-01, -0.0458541, 0.986022, 0.160184),
    (27, 7.66119e-02, -0.364744, 0.843603, 0.394076),
    (36, 3.55355e-02, -0.534997, 0.686967, -0.491787),
    (45, 7.01845e-02, 0.00959953, 0.959825, -0.280434),
    (54, 5.74313e-02, 0.0477927, 0.985371, 0.163584),
    (63, 2.19660e-02, -0.440604, 0.648043, 0.621216),
    (72, 1.25959e-02, -0.831996, 0.203255, -0.516208),
    (81, 1.73750e-02, 0.0341670, 0.795354, -0.605182),
    (90, 1.24601e-02, 0.230462, 0.937497, 0.260742),
    (99, 6.79093e-03, -0.713472, -0.00717397, 0.700647),
    (108, 9.54239e-03, -0.756255, -0.0394748, -0.653085),
    (117, 8.63419e-03, -0.281215, 0.536251, -0.795835),
    (126, 2.27421e-03, -0.239612, 0.967602, 0.0795798),
    (135, 5.43998e-03, -0.850804, 0.187531, -0.490882),
    (144, 1.60243e-02, -0.706334, 0.495254, -0.505781),
    (153, 1.88852e-02, -0.891081, 0.453277, -0.0226817),
    (162, 1.95254e-02, -0.783319, -0.391613, 0.482752),
    (171, 3.01676e-02, -0.196194, -0.962069, 0.189556),
    (180, 3.83189e-02, 0, -1.00000, 0),
]


@pytest.mark.published
def test_bohren_huffman_1983_appendix_a_with_polarization_labels():
    angle, s11, polarization, s33, s34 = np.array(BOHREN_HUFFMAN).T
    x = 2 * np.pi * 0.525 / 0.6328
    light = scatter([x], 1.55, np.radians(angle))
    i1, i2 = light.perpendicular[:, 0], light.parallel[:, 0]
    s1, s2 = (s[:, 0] for s in amplitudes([x], 1.55, np.radians(angle)))
    total = (i1 + i2) / 2
    assert light.extinction_efficiency[0] == pytest.approx(3.10543, abs=5e-6)
    assert 4 * total[-1] / x**2 == pytest.approx(2.92534, abs=5e-6)
    assert total / total[0] == pytest.approx(s11, rel=1e-5)
    # S1 is the perpendicular component: i1 = S11 (1 + POL), i2 = S11 (1 - POL)
    assert (i1 - i2) / (i1 + i2) == pytest.approx(polarization, abs=1e-5)
    assert (s2 * s1.conj()).real / total == pytest.approx(s33, abs=2e-5)
    assert (s2 * s1.conj()).imag / total == pytest.approx(s34, abs=2e-5)


@pytest.mark.published
@pytest.mark.parametrize(
    ("m", "extinction", "scattering"),
    [(1.55 + 0.1j, 2.86165188243, 1.66424911991), (1.55, 3.1054255, 3.1054255)],
)
def test_bohren_huffman_1983_size_with_absorption(m, extinction, scattering):
    # values quoted beside the worked example by later reprints of the program
    light = scatter([2 * np.pi * 0.525 / 0.6328], m, [0.0])
    assert light.extinction_efficiency[0] == pytest.approx(extinction, rel=1e-7)
    assert light.scattering_efficiency[0] == pytest.approx(scattering, rel=1e-7)


@pytest.mark.published
def test_bohren_huffman_1983_table_4_1_coefficients():
    # m = 1.33 + 1e-8 i, x = 3; the book's Re b_4 as recalled ends in 1, computed 0
    a = [
        0.51631 - 0.49973j,
        0.34192 - 0.47435j,
        0.048467 - 0.21475j,
        1.0346e-3 - 3.2148e-2j,
        9.0375e-6 - 3.0062e-3j,
    ]
    b = [
        0.73767 - 0.43990j,
        0.40079 - 0.49006j,
        9.3553e-3 - 9.6269e-2j,
        6.8810e-5 - 8.2949e-3j,
        2.8309e-7 - 5.3204e-4j,
    ]
    electric, magnetic = coefficients(3.0, 1.33 + 1e-8j)
    for found, printed in ((electric, np.array(a)), (magnetic, np.array(b))):
        assert found[:5].real == pytest.approx(printed.real, rel=2e-5)
        assert found[:5].imag == pytest.approx(printed.imag, rel=2e-5)


@pytest.mark.published
@pytest.mark.parametrize(
    ("x", "m", "a1", "b1"),
    [
        (
            50,
            4 / 3,
            0.5311058892948411929 - 0.4990314856310943073j,
            0.7919244759352004773 - 0.4059311522289938238j,
        ),
        (
            2,
            1.5 + 1j,
            0.5465202033970914511 - 0.1523738572575972279j,
            0.3897147278879423235 + 0.2278960752564908264j,
        ),
    ],
)
def test_aragon_first_coefficients(x, m, a1, b1):
    # S. Aragon's high-precision notebook of the series; the second case is quoted beside
    # m = 1.5 - i, but its signs are those of n + ik
    electric, magnetic = coefficients(x, m)
    assert electric[0] == pytest.approx(a1, rel=1e-12)
    assert magnetic[0] == pytest.approx(b1, rel=1e-12)


# H. Du, Applied Optics 43 (2004) 1951, tables 1 and 2: x, m, Qext, Qsca, S1(0), S1(180).
DU = [
    (0.099, 0.75, 7.417859e-06, 7.417859e-06, 1.81756e-8 + 1.65423e-4j, 1.81756e-8 + 1.64810e-4j),
    (0.101, 0.75, 8.033538e-06, 8.033538e-06, 2.04875e-8 + 1.75642e-4j, 2.04875e-8 + 1.74965e-4j),
    (10, 0.75, 2.232265, 2.232265, 55.8066 + 9.75810j, -1.07857 + 0.0360881j),
    (1000, 0.75, 1.997908, 1.997908, 499477 + 13365j, 17.0578 - 484.251j),
    (100, 1.33 + 1e-5j, 2.101321, 2.096594, 5253.3 + 124.319j, -56.5921 - 46.5097j),
    (10000, 1.33 + 1e-5j, 2.004089, 1.723857, 5.01022e7 + 153582j, -182.119 + 951.912j),
    (0.055, 1.5 + 1j, 0.10149104, 1.131687e-05, 7.67526e-5 - 8.34388e-5j, 7.66140e-5 - 8.33814e-5j),
    (100, 1.5 + 1j, 2.097502, 1.283697, 5243.75 + 293.417j, -20.2936 - 4.38444j),
    (1, 10 + 10j, 2.532993, 2.049405, 0.633248 - 0.417931j, 0.448546 - 0.791236j),
    (100, 10 + 10j, 2.071124, 1.836785, 5177.81 + 26.3381j, -41.4538 + 18.2181j),
]


@pytest.mark.published
@pytest.mark.parametrize(("x", "m", "extinction", "scattering", "forward", "backward"), DU)
def test_du_2004(x, m, extinction, scattering, forward, backward):
    light = scatter([x], m, [0.0])
    assert light.extinction_efficiency[0] == pytest.approx(extinction, rel=3e-7)
    assert light.scattering_efficiency[0] == pytest.approx(scattering, rel=3e-7)
    s1, _ = amplitudes([x], m, [0.0, np.pi])
    expected = np.array([forward, backward])
    assert np.all(np.abs(s1[:, 0] - expected) < 5e-6 * np.abs(expected))


@pytest.mark.published
def test_water_at_helium_neon_wavelength():
    # computed with two libraries that agree to 1e-9 (miepython and scattnlay), n = 1.332107:
    # x, Qext, i1 and i2 at 15 degrees, i1 and i2 at 90 degrees
    rows = [
        (0.992918, 0.092807, 5.026853e-02, 4.710790e-02, 3.311329e-02, 4.292026e-05),
        (4.964590, 3.599128, 3.616964e02, 3.617795e02, 2.088693, 1.670590),
        (9.929180, 2.236819, 2.311904e01, 1.057184e02, 3.928802, 1.443208e01),
        (49.645902, 2.080762, 8.722204e03, 9.339638e03, 7.805408e01, 2.689865e02),
        (99.291803, 2.082976, 1.896663e04, 1.818100e04, 1.353211e02, 3.401863e02),
    ]
    for x, *expected in rows:
        light = scatter([x], 1.332107, np.radians([15.0, 90.0]))
        pairs = np.stack([light.perpendicular[:, 0], light.parallel[:, 0]], axis=1).ravel()
        found = [light.extinction_efficiency[0], *pairs]
        assert found == pytest.approx(expected, rel=2e-5)


# mpmath with 60 to 90 digits, the series summed until terms fall below 1e-80 of the first:
# m, x, angle in degrees, S1, S2, Qext. The last two sit on resonances.
PRECISE = [
    (
        1.333 + 0.0j,
        0.01,
        90,
        2.820688732148066e-14 - 2.0569475194176923e-07j,
        2.9094412660101394e-24 - 6.139564634867233e-13j,
        1.1282754931005067e-09,
    ),
    (
        1.333 + 0.0j,
        1.0,
        90,
        0.02337612968958938 - 0.18447623254258705j,
        0.0002795975563267168 - 0.006835772815235627j,
        0.09565235199561245,
    ),
    (
        1.333 + 0.0j,
        100.0,
        0,
        5299.919597203551 + 57.49134524036041j,
        5299.919597203551 + 57.49134524036041j,
        2.1199678388814207,
    ),
    (
        1.333 + 0.0j,
        100.0,
        90,
        -5.815425854324242 - 10.098545136590314j,
        -6.581157229990252 + 3.429148281891455j,
        2.1199678388814207,
    ),
    (
        1.333 + 0.0j,
        150.0,
        30,
        -1.7318172295770689 - 154.86921134149455j,
        -24.317937457238152 - 171.06914390413644j,
        2.092010801434623,
    ),
    (
        1.333 + 0.0j,
        500.0,
        180,
        121.09332725066669 - 101.20914660698192j,
        -121.09332725066669 + 101.20914660698192j,
        2.0302613665245683,
    ),
    (
        1.385 + 0.0j,
        500.0,
        30,
        -206.3276865560652 - 320.52459408186894j,
        -239.6551682868864 - 376.33391774643883j,
        2.0279264000548185,
    ),
    (
        1.4 + 1e-06j,
        100.0,
        90,
        7.8147983933273055 - 12.467766118912522j,
        13.076830888255518 + 2.7599600034926595j,
        2.1699590017566717,
    ),
    (
        0.75 + 0.0j,
        10.0,
        90,
        -1.7859047820771978 + 0.05232828139837049j,
        -0.5148747993629361 + 0.7027287822624705j,
        2.232264842502022,
    ),
    (
        1.333 + 0.0j,
        44.747159,
        90,
        6.448251783275781 + 1.4948432570825576j,
        10.222027836036178 - 4.701202510318688j,
        2.507146725034762,
    ),
    (
        1.333 + 0.0j,
        59.91560439,
        90,
        -2.78459535709907 - 4.55149500554443j,
        -5.781530921045858 + 2.694570985878893j,
        2.091438215171913,
    ),
]


def check_precise(m, x, angle, s1, s2, efficiencies):
    """Hold an evaluation to 1e-10 of the intensity (1e-8 on resonances), 1e-12 in efficiency."""
    light = scatter([x], m, [np.radians(angle)])
    expected = (abs(s1) ** 2 + abs(s2) ** 2) / 2
    found = (light.perpendicular[0, 0] + light.parallel[0, 0]) / 2
    resonant = x in {44.747159, 59.91560439}
    assert found == pytest.approx(expected, rel=1e-8 if resonant else 1e-10)
    found = light.extinction_efficiency[0], light.scattering_efficiency[0]
    assert found[: len(efficiencies)] == pytest.approx(efficiencies, rel=1e-12)


@pytest.mark.parametrize(("m", "x", "angle", "s1", "s2", "extinction"), PRECISE)
def test_high_precision_values(m, x, angle, s1, s2, extinction):
    check_precise(m, x, angle, s1, s2, [extinction])


def test_high_precision_file():
    if not REFERENCE.exists():
        pytest.skip("the folder ../shared with mie-reference.json is not beside this checkout")
    cases = json.loads(REFERENCE.read_text(encoding="utf-8"))["cases"]
    assert len(cases) > 40
    for case in cases:
        m, s1, s2 = (complex(*map(float, case[name])) for name in ("m", "S1", "S2"))
        efficiencies = [float(case[name]) for name in ("Qext", "Qsca")]
        check_precise(m, float(case["x"]), float(case["theta"]), s1, s2, efficiencies)


@pytest.mark.parametrize("m", [1.333, 1.5 + 0.02j])
def test_miepython(m):
    miepython = pytest.importorskip("miepython")
    sizes = np.geomspace(0.05, 120.0, 12)
    angles = np.radians([0.0, 1.0, 15.0, 90.0, 137.0, 180.0])
    found = amplitudes(sizes, m, angles)
    light = scatter(sizes, m, angles)
    for i, x in enumerate(sizes):
        # its time factor is the conjugate of ours
        theirs = np.conj(miepython.S1_S2(np.conj(m), x, np.cos(angles), norm="wiscombe"))
        largest = np.abs(theirs).max()
        assert np.abs(np.array(found)[..., i] - theirs).max() < 3e-6 * largest
        efficiencies = miepython.efficiencies_mx(np.conj(m), x)[:2]
        ours = light.extinction_efficiency[i], light.scattering_efficiency[i]
        assert ours == pytest.approx(efficiencies, rel=2e-6)


@pytest.mark.parametrize("m", [1.333, 1.5 + 0.01j])
def test_pymiescatt(m, monkeypatch):
    # PyMieScatt asks for scipy.integrate.trapz, which SciPy 1.14 renamed. It sums too few terms
    # for small spheres (1e-3 at x = 0.3), and its downward recurrence starts too late for large
    # ones (1e-4 at x = 100), so the comparison runs from 1 to 40
    scipy_integrate = pytest.importorskip("scipy.integrate")
    monkeypatch.setattr(scipy_integrate, "trapz", scipy_integrate.trapezoid, raising=False)
    library = pytest.importorskip("PyMieScatt")
    angles = np.radians([1.0, 30.0, 90.0, 150.0])
    sizes = [1.0, 5.0, 20.0, 40.0]
    light = scatter(sizes, m, angles)
    for i, x in enumerate(sizes):
        theirs = np.array([library.MieS1S2(m, x, mu) for mu in np.cos(angles)])
        assert light.perpendicular[:, i] == pytest.approx(np.abs(theirs[:, 0]) ** 2, rel=1e-6)
        assert light.parallel[:, i] == pytest.approx(np.abs(theirs[:, 1]) ** 2, rel=1e-6)
        efficiencies = library.MieQ(m, 633.0, x * 633.0 / np.pi)[:2]
        ours = light.extinction_efficiency[i], light.scattering_efficiency[i]
        assert ours == pytest.approx(efficiencies, rel=1e-6)


def test_rayleigh_limit():
    # Bohren and Huffman, equations 5.7 to 5.9
    m, x = 1.4 + 0.1j, 0.005
    polarizability = (m**2 - 1) / (m**2 + 2)
    angle = np.radians([0.0, 40.0, 90.0, 160.0])
    light = scatter([x], m, angle)
    assert light.scattering_efficiency[0] == pytest.approx(
        8 / 3 * x**4 * abs(polarizability) ** 2, rel=1e-4
    )
    assert light.extinction_efficiency[0] == pytest.approx(4 * x * polarizability.imag, rel=1e-4)
    size = x**6 * abs(polarizability) ** 2
    assert light.perpendicular[:, 0] == pytest.approx(size, rel=1e-4)
    assert light.parallel[:, 0] == pytest.approx(
        size * np.cos(angle) ** 2, rel=1e-4, abs=1e-8 * size
    )


def test_anomalous_diffraction_limit():
    # van de Hulst 1957, chapter 11: m close to 1; first maximum 3.17 at 2x(m - 1) = 4.09 (memory)
    m = 1.002
    shift = np.linspace(1.0, 12.0, 23)
    expected = 2 - 4 / shift * np.sin(shift) + 4 / shift**2 * (1 - np.cos(shift))
    found = scatter(shift / (2 * (m - 1)), m, [0.0]).extinction_efficiency
    assert found == pytest.approx(expected, rel=5e-3)
    fine = np.linspace(3.8, 4.4, 41)
    near = scatter(fine / (2 * (m - 1)), m, [0.0]).extinction_efficiency
    assert near.max() == pytest.approx(3.17, abs=0.01)
    assert fine[near.argmax()] == pytest.approx(4.09, abs=0.03)


@settings(max_examples=40, deadline=None)
@given(
    x=st.floats(0.02, 150.0),
    n=st.floats(1.01, 1.8),
    k=st.one_of(st.just(0.0), st.floats(1e-9, 0.5)),
)
def test_optical_theorem_and_energy(x, n, k):
    # Bohren and Huffman, equation 4.76: Qext = 4/x^2 Re S(0)
    m = complex(n, k)
    (forward, backward), (forward2, backward2) = amplitudes([x], m, [0.0, np.pi])
    light = scatter([x], m, [0.0])
    extinction, scattering = light.extinction_efficiency[0], light.scattering_efficiency[0]
    assert 4 / x**2 * forward.real == pytest.approx(extinction, rel=1e-11)
    assert forward == pytest.approx(forward2, rel=1e-11)
    assert backward == pytest.approx(-backward2, rel=1e-9, abs=1e-12 * abs(forward[0]))
    assert scattering <= extinction * (1 + 1e-12)
    if k == 0:
        assert scattering == pytest.approx(extinction, rel=1e-11)


@pytest.mark.parametrize("polarization", [None, 0.0, 0.7])
def test_absolute_scale_by_the_integral_over_the_sphere(polarization):
    # all light: the integral over the sphere is pi x^2 Qsca, however the beam is polarized
    x, m = np.array([0.4, 3.0, 17.0, 60.0]), 1.4 + 0.003j
    halves = [cone_quadrature(axis, np.pi / 2 - 1e-9, polarization, 60.0) for axis in (0, np.pi)]
    total = 0.0
    for half in halves:
        light = scatter(x, m, half.angle)
        total = total + half.perpendicular @ light.perpendicular + half.parallel @ light.parallel
    efficiency = scatter(x, m, [0.0]).scattering_efficiency
    assert total == pytest.approx(np.pi * x**2 * efficiency, rel=1e-7)


def light_over_a_cone_by_vectors(x, m, axis, half_angle, polarization):
    """Integrate over directions laid out about the cone's axis, each with its own field vectors."""
    nodes, widths = np.polynomial.legendre.leggauss(60)
    tilt, turn = np.meshgrid(
        half_angle * (nodes + 1) / 2, np.arange(160) * 2 * np.pi / 160, indexing="ij"
    )
    area = np.sin(tilt) * (half_angle * widths / 2)[:, None] * 2 * np.pi / 160
    centre = np.array([np.sin(axis), 0.0, np.cos(axis)])
    across = np.array([np.cos(axis), 0.0, -np.sin(axis)])
    upright = np.array([0.0, 1.0, 0.0])
    direction = (
        np.cos(tilt)[..., None] * centre
        + (np.sin(tilt) * np.cos(turn))[..., None] * across
        + (np.sin(tilt) * np.sin(turn))[..., None] * upright
    )
    beam = np.array([0.0, 0.0, 1.0])
    normal = np.cross(direction, beam)  # of the direction's own scattering plane
    normal /= np.linalg.norm(normal, axis=-1, keepdims=True)
    light = scatter([x], m, np.arccos(np.clip(direction[..., 2], -1, 1)).ravel())
    i1, i2 = (i[:, 0].reshape(tilt.shape) for i in (light.perpendicular, light.parallel))
    if polarization is None:
        return np.sum(area * (i1 + i2) / 2)
    field = np.array([np.cos(polarization), np.sin(polarization), 0.0])
    share = (normal @ field) ** 2
    return np.sum(area * (share * i1 + (1 - share) * i2))


CONES = [(30, 1), (90, 3), (15, 5), (120, 12), (3, 5), (2.2, 2), (178, 4), (10, 40), (0, 1)]


@pytest.mark.parametrize(("axis", "half_angle"), CONES)
@pytest.mark.parametrize("polarization", [None, 0.0, np.pi / 2, 0.4])
def test_cone_against_vectors(axis, half_angle, polarization):
    axis, half_angle = np.radians([axis, half_angle])
    cone = cone_quadrature(axis, half_angle, polarization, 80.0)
    for x in (0.5, 12.0, 80.0):
        light = scatter([x], 1.333, cone.angle)
        found = (cone.perpendicular @ light.perpendicular + cone.parallel @ light.parallel)[0]
        expected = light_over_a_cone_by_vectors(x, 1.333, axis, half_angle, polarization)
        assert found == pytest.approx(expected, rel=1e-6)


def test_out_of_plane_weights_matter():
    # seen from 15 degrees with a half angle of 5, |S2|^2 contributes though the beam is
    # polarized perpendicular to the bench's plane
    cone = cone_quadrature(np.radians(15), np.radians(5), np.pi / 2, 50.0)
    share = cone.parallel.sum() / (cone.parallel.sum() + cone.perpendicular.sum())
    assert 0.02 < share < 0.04


@settings(max_examples=25, deadline=None)
@given(st.permutations(range(30)), st.integers(1, 30))
def test_order_and_company_of_sizes_do_not_matter(order, count):
    sizes = np.geomspace(0.05, 90.0, 30)[list(order)][:count]
    together = scatter(sizes, 1.4, [0.5])
    apart = [scatter([x], 1.4, [0.5]).perpendicular[0, 0] for x in sizes[:3]]
    assert together.perpendicular[0, :3] == pytest.approx(apart, rel=1e-9)


def test_blocks_cover_all_sizes_once():
    sizes = np.sort(np.random.default_rng(1).uniform(0.05, 200.0, 5000))
    covered = np.concatenate([np.arange(sizes.size)[block] for block in size_blocks(sizes, 500)])
    assert np.array_equal(covered, np.arange(sizes.size))


@pytest.mark.parametrize(
    ("sizes", "m", "text"),
    [
        ([1.0, 0.0], 1.33, "element 1 is 0"),
        ([np.nan], 1.33, "element 0 is nan"),
        ([1.0], 1.33 - 0.1j, "k >= 0"),
        ([1.0], -1.33, "n > 0"),
    ],
)
def test_impossible_input_is_refused(sizes, m, text):
    with pytest.raises(InvalidInputError, match=text):
        scatter(sizes, m, [0.0])


@pytest.mark.parametrize("half_angle", [0.0, -0.1, 2.0, np.nan])
def test_impossible_cone_is_refused(half_angle):
    with pytest.raises(InvalidInputError, match="half angle of the cone"):
        cone_quadrature(0.5, half_angle, None, 10.0)
