"""Ground floor: the carrier gases, one record each."""

from functools import partial

from scatterfit.constants import GAS_CONSTANT, ICE_POINT
from scatterfit.errors import InvalidInputError
from scatterfit.matter_forms import constant, curved_power, polynomial
from scatterfit.matter_records import PureGas, Refractivity, properties_over
from scatterfit.matter_substance import unknown

_FIT = "own fit ({} percent) to {}"
_LEMMON = "Lemmon and Jacobsen 2004"

gas_property = properties_over(150.0, 340.0)
"""Makes a property of a carrier gas."""


def _heat(coefficients, source="own fit (0.01 percent) to the reference equation of state"):
    """Return a molar heat capacity, ascending in degrees Celsius; alone, a monatomic gas."""
    if coefficients is None:
        function = partial(constant, value=2.5 * GAS_CONSTANT)
        source, uncertainty = "5/2 R, monatomic", 1e-4
    else:
        function = partial(polynomial, coefficients=coefficients, shift=ICE_POINT)
        uncertainty = 1e-3
    return gas_property("heat capacity", "J/(mol K)", function, source, uncertainty)


def _conductivity(value, exponent, curvature, source, uncertainty):
    """Return a thermal conductivity of the ``curved_power`` form."""
    function = partial(curved_power, value=value, exponent=exponent, curvature=curvature)
    return gas_property("conductivity", "W/(m K)", function, source, uncertainty)


def _viscosity(value, exponent, curvature, source, uncertainty):
    """Return a viscosity of the ``curved_power`` form."""
    function = partial(curved_power, value=value, exponent=exponent, curvature=curvature)
    return gas_property("viscosity", "Pa s", function, source, uncertainty)


PURE_GASES = (
    PureGas(
        name="argon",
        aliases=("Ar",),
        molar_mass=39.948e-3,
        diffusion_volume=16.2,
        heat_capacity=_heat(None),
        conductivity=_conductivity(1.78049e-2, 0.8370, -0.0906, _FIT.format(0.01, _LEMMON), 0.005),
        viscosity=_viscosity(2.27246e-5, 0.8344, -0.0867, _FIT.format(0.01, _LEMMON), 0.005),
        refractivity=Refractivity(
            6.432135e-5, ((2.8606021e-2, 144.0),), 288.15, "Peck and Fisher 1964"
        ),
    ),
    PureGas(
        name="nitrogen",
        aliases=("N2",),
        molar_mass=28.0134e-3,
        diffusion_volume=18.5,
        heat_capacity=_heat((29.1162514, 2.82392553e-4, 3.37694071e-6, 1.50123744e-8)),
        conductivity=_conductivity(2.59389e-2, 0.8340, -0.0887, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(1.78781e-5, 0.7735, -0.0830, _FIT.format(0.02, _LEMMON), 0.005),
        refractivity=Refractivity(
            6.497378e-5, ((3.0738649e-2, 144.0),), 288.15, "Peck and Khanna 1966"
        ),
    ),
    PureGas(
        name="helium",
        aliases=("He", "helium-4"),
        molar_mass=4.002602e-3,
        diffusion_volume=2.67,
        heat_capacity=_heat(None),
        conductivity=_conductivity(
            1.55894e-1, 0.6918, 0.0073, _FIT.format(0.01, "Hands and Arp 1981"), 0.005
        ),
        viscosity=_viscosity(
            1.99260e-5, 0.6846, 0.0157, _FIT.format(0.01, "Arp, McCarty and Friend 1998"), 0.005
        ),
        refractivity=Refractivity(0.0, ((0.01470091, 423.98),), 273.15, "Mansfield and Peck 1969"),
    ),
    PureGas(
        name="air",
        aliases=("dry air",),
        molar_mass=28.9655e-3,
        diffusion_volume=19.7,
        heat_capacity=_heat((29.0721992, 9.5249e-4, 7.68772e-6, 2.19965e-8)),
        conductivity=_conductivity(2.63557e-2, 0.8453, -0.0841, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(1.85240e-5, 0.7803, -0.0838, _FIT.format(0.02, _LEMMON), 0.005),
        refractivity=Refractivity(
            0.0,
            ((0.05792105, 238.0185), (0.00167917, 57.362)),
            288.15,
            "Ciddor 1996, standard air",
        ),
    ),
    PureGas(
        name="oxygen",
        aliases=("O2",),
        molar_mass=31.9988e-3,
        diffusion_volume=16.3,
        heat_capacity=_heat((29.2711643, 3.49187e-3, 2.40710e-5, 4.88939e-8)),
        conductivity=_conductivity(2.64429e-2, 0.8922, -0.0823, _FIT.format(0.03, _LEMMON), 0.01),
        viscosity=_viscosity(2.06316e-5, 0.8025, -0.0855, _FIT.format(0.01, _LEMMON), 0.01),
        refractivity=Refractivity(
            1.181494e-4, ((9.708931e-3, 75.4),), 293.15, "Zhang, Lu and Wang 2008"
        ),
    ),
    PureGas(
        name="carbon dioxide",
        aliases=("CO2",),
        molar_mass=44.0095e-3,
        diffusion_volume=26.9,
        heat_capacity=_heat((35.9651301, 4.79451e-2, -3.34149e-5, -1.46075e-7)),
        conductivity=_conductivity(
            1.67132e-2,
            1.3788,
            -0.0088,
            _FIT.format(0.1, "the reference correlation in CoolProp"),
            0.02,
        ),
        viscosity=_viscosity(
            1.49914e-5,
            0.9548,
            -0.0313,
            _FIT.format(0.1, "the reference correlation in CoolProp"),
            0.01,
        ),
        refractivity=Refractivity(
            0.0,
            ((1.54489e-6, 0.0584738), (8.309193e-2, 210.9241), (2.8764190e-3, 60.122959)),
            273.15,
            "Old, Gentili and Peck 1971",
        ),
    ),
    PureGas(
        name="neon",
        aliases=("Ne",),
        molar_mass=20.1797e-3,
        diffusion_volume=5.98,
        heat_capacity=_heat(None),
        conductivity=_conductivity(
            4.90037e-2,
            0.6921,
            -0.0179,
            _FIT.format(0.02, "Perry's Handbook, 8th ed. 2008, table 2-314"),
            0.02,
        ),
        viscosity=_viscosity(
            3.15246e-5,
            0.6828,
            -0.0112,
            _FIT.format(0.02, "Perry's Handbook, 8th ed. 2008, table 2-312"),
            0.02,
        ),
        refractivity=Refractivity(
            0.0, ((2.9073879e-2, 435.71375),), 273.15, "Cuthbertson and Cuthbertson 1932"
        ),
    ),
)
"""The carriers, in the order in which they are listed."""

_FOUND_BY = {key.casefold(): gas for gas in PURE_GASES for key in (gas.name, *gas.aliases)}


def pure_gas(name):
    """Return a carrier gas by name or formula.

    Parameters
    ----------
    name : str
        Name, in any case.

    Returns
    -------
    gas : PureGas
        The gas.

    Raises
    ------
    InvalidInputError
        If the name is unknown; the message gives the nearest known one.

    Examples
    --------
    >>> pure_gas("Ar").name
    'argon'
    """
    gas = _FOUND_BY.get(str(name).strip().casefold())
    if gas is None:
        raise InvalidInputError(unknown("gas", name, [gas.name for gas in PURE_GASES]))
    return gas
