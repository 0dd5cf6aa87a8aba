"""Ground floor: alcohols and alkanes that chambers use, from handbook correlations."""

from dataclasses import dataclass
from functools import partial

from scatterfit.constants import GAS_CONSTANT, ICE_POINT
from scatterfit.matter_forms import (
    cauchy,
    curved_power,
    guggenheim_tension,
    handbook_index,
    polynomial,
    rackett_density,
    sellmeier,
    wagner_latent_heat,
    wagner_pressure,
)
from scatterfit.matter_records import Property, RefractiveIndex
from scatterfit.matter_substance import Substance
from scatterfit.matter_water import LATENT_SOURCE, dilute_vapour

_POLING = "Poling et al. 2001, appendix A"
_JASPER = "Jasper 1972, as in Lange's Handbook, extrapolated below 273 K"


@dataclass(frozen=True)
class _Organic:
    """The numbers of one organic liquid, as the handbooks print them."""

    name: str
    cas: str
    aliases: tuple[str, ...]
    molar_mass: float
    diffusion_volume: float
    wagner: tuple[float, ...]
    """A, B, C, D of the saturation pressure (2.5-5 form)."""
    critical: tuple[float, float]
    """Temperature [K] and pressure [Pa] that go with them."""
    melting: float
    """[K]."""
    pressure_uncertainty: float
    """Spread of the published fits at 250 K [-]."""
    density: tuple[float, ...]
    """DIPPR 105: C1 [kmol/m^3], C2, C3 [K], C4."""
    tension: Property
    vapour_heat: tuple[float, ...]
    """Ascending coefficients of cp/R."""
    liquid_heat: tuple[float, ...]
    """DIPPR 100, ascending [J/(kmol K)]."""
    conductivity: tuple[float, float, float]
    """``curved_power`` [W/(m K)]."""
    viscosity: tuple[float, float, float]
    """``curved_power`` [Pa s]."""
    transport: str
    """Source of the last two."""
    index: RefractiveIndex


def _tension(correlation, source, uncertainty):
    """Return a surface tension."""
    return Property("surface tension", "N/m", correlation, source, (230.0, 350.0), uncertainty)


def _jasper(intercept, slope, uncertainty=0.01):
    """Return Jasper's line, given in mN/m and degrees Celsius."""
    line = partial(polynomial, coefficients=(intercept, -slope), scale=1e-3, shift=ICE_POINT)
    return _tension(line, _JASPER, uncertainty)


def _index(shape, level, slope, celsius, source, book="CRC Handbook"):
    """Return a handbook index with a published shape of the dispersion."""
    function = partial(
        handbook_index,
        shape=shape,
        level=level,
        slope=slope,
        level_temperature=ICE_POINT + celsius,
    )
    source = (
        f"{book} n_D = {level} at {celsius} C, dispersion of {source}, "
        f"dn/dT = {slope:g}/K; absorption taken as 0"
    )
    return RefractiveIndex(function, source, (230.0, 330.0), (0.4e-6, 0.8e-6), 8e-4)


def _liquid_properties(organic):
    """Return the fields of the liquid in equilibrium with its vapour."""
    critical_temperature, critical_pressure = organic.critical
    liquid = (organic.melting, critical_temperature)
    wagner = {"coefficients": organic.wagner, "critical_temperature": critical_temperature}
    pressure = partial(wagner_pressure, critical_pressure=critical_pressure, **wagner)
    c1, *rest = organic.density
    density = partial(
        rackett_density, coefficients=(1e3 * c1, *rest), molar_mass=organic.molar_mass
    )
    heat = partial(polynomial, coefficients=organic.liquid_heat, scale=1e-3)
    slope = partial(wagner_latent_heat, **wagner)
    perry = "Perry's Handbook, 8th ed. 2008, table 2-{}"
    wagner_source, spread = f"{_POLING} (Wagner 2.5-5)", organic.pressure_uncertainty
    density_source, heat_source = perry.format("32 (DIPPR 105)"), perry.format("153 (DIPPR 100)")
    cold = (organic.melting, 320.0)
    rows = (
        ("saturation pressure", "Pa", pressure, wagner_source, liquid, spread),
        ("density", "kg/m^3", density, density_source, liquid, 0.006),
        ("latent heat", "J/mol", slope, LATENT_SOURCE, liquid, 0.015),
        ("liquid heat capacity", "J/(mol K)", heat, heat_source, cold, 0.02),
    )
    return {row[0].replace(" ", "_"): Property(*row) for row in rows}


def _vapour_properties(organic):
    """Return the fields of the dilute vapour."""

    def power(triple):
        value, exponent, curvature = triple
        return partial(curved_power, value=value, exponent=exponent, curvature=curvature)

    heat = partial(polynomial, coefficients=organic.vapour_heat, scale=GAS_CONSTANT)
    rows = (
        ("vapour heat capacity", "J/(mol K)", heat, _POLING, 0.02),
        ("vapour conductivity", "W/(m K)", power(organic.conductivity), organic.transport, 0.1),
        ("vapour viscosity", "Pa s", power(organic.viscosity), organic.transport, 0.05),
    )
    return {row[0].replace(" ", "_"): dilute_vapour(*row) for row in rows}


def _build(organic):
    """Return the full record of one organic liquid."""
    return Substance(
        name=organic.name,
        cas=organic.cas,
        aliases=organic.aliases,
        molar_mass=organic.molar_mass,
        critical_temperature=organic.critical[0],
        diffusion_volume=organic.diffusion_volume,
        surface_tension=organic.tension,
        refractive_index=organic.index,
        **_liquid_properties(organic),
        **_vapour_properties(organic),
    )


_REFERENCE_FIT = "own fit to the reference correlation in CoolProp ({}), extrapolated below 274 K"
_PERRY_FIT = "own fit to Perry's Handbook, 8th ed. 2008, tables 2-312 and 2-314"
_KERL = partial(cauchy, terms=((1.39260498, 0), (-4.48963e-3, -1), (4.79591e-3, -2)))

ETHANOL = _build(
    _Organic(
        name="ethanol",
        cas="64-17-5",
        aliases=("ethyl alcohol", "C2H5OH", "C2H6O"),
        molar_mass=46.06844e-3,
        diffusion_volume=51.77,
        wagner=(-8.68587, 1.17831, -4.8762, 1.588),
        critical=(513.92, 6132000.0),
        melting=159.05,
        pressure_uncertainty=0.01,
        density=(1.6288, 0.27469, 514.0, 0.23178),
        tension=_jasper(24.05, 0.0832),
        vapour_heat=(4.396, 0.000628, 5.546e-5, -7.024e-8, 2.685e-11),
        liquid_heat=(102640.0, -139.63, -0.030341, 0.0020386),
        conductivity=(1.53916e-2, 1.8161, 0.3915),
        viscosity=(8.82915e-6, 1.0426, -0.1214),
        transport=_REFERENCE_FIT.format("Assael et al. 2013, Kiselev et al. 2005"),
        index=_index(
            partial(cauchy, terms=((1.35265, 0), (0.00306, -2), (0.00002, -4))),
            1.3611,
            -4.0e-4,
            20.0,
            "Rheims et al. 1997",
        ),
    )
)
"""Ethanol."""

PROPANOL = _build(
    _Organic(
        name="1-propanol",
        cas="71-23-8",
        aliases=("n-propanol", "propan-1-ol", "propyl alcohol", "n-propyl alcohol", "C3H7OH"),
        molar_mass=60.09502e-3,
        diffusion_volume=72.29,
        wagner=(-8.53706, 1.96214, -7.6918, 2.945),
        critical=(536.78, 5168000.0),
        melting=146.95,
        pressure_uncertainty=0.03,
        density=(1.2457, 0.27281, 536.8, 0.23994),
        tension=_jasper(25.26, 0.0777),
        vapour_heat=(4.712, 0.006565, 6.31e-5, -8.341e-8, 3.216e-11),
        liquid_heat=(158760.0, -635.0, 1.969),
        conductivity=(1.46321e-2, 1.7927, 0.0),
        viscosity=(7.62862e-6, 1.1298, -0.1214),
        transport=_PERRY_FIT,
        index=_index(
            partial(sellmeier, terms=((0.8940, 0.0944**2), (0.0158, 2.97**2))),
            1.3850,
            -3.9e-4,
            20.0,
            "Chang et al. 2024",
        ),
    )
)
"""1-propanol."""

BUTANOL = _build(
    _Organic(
        name="1-butanol",
        cas="71-36-3",
        aliases=("n-butanol", "butan-1-ol", "butyl alcohol", "n-butyl alcohol", "C4H9OH"),
        molar_mass=74.1216e-3,
        diffusion_volume=92.81,
        wagner=(-8.40615, 2.2301, -8.2486, -0.711),
        critical=(563.05, 4424000.0),
        melting=183.85,
        pressure_uncertainty=0.05,
        density=(0.98279, 0.2683, 563.1, 0.25488),
        tension=_tension(
            partial(
                guggenheim_tension,
                scale=0.04839,
                exponent=0.91063,
                critical_temperature=563.05,
            ),
            "VDI Heat Atlas 2010 (PPDS); Jasper's line is 2.5 percent higher than it and others",
            0.015,
        ),
        vapour_heat=(4.467, 0.016395, 6.688e-5, -9.69e-8, 3.864e-11),
        liquid_heat=(191200.0, -730.4, 2.2998),
        conductivity=(1.43766e-2, 1.7917, -0.0386),
        viscosity=(6.97725e-6, 1.1023, -0.1147),
        transport=_PERRY_FIT,
        index=_index(
            partial(sellmeier, terms=((0.9314, 0.0959**2), (0.0137, 2.97**2))),
            1.3988,
            -3.9e-4,
            20.0,
            "Chang et al. 2024",
        ),
    )
)
"""1-butanol."""

OCTANE = _build(
    _Organic(
        name="n-octane",
        cas="111-65-9",
        aliases=("octane", "C8H18"),
        molar_mass=114.22852e-3,
        diffusion_volume=168.78,
        wagner=(-8.04937, 2.03865, -3.312, -3.648),
        critical=(568.95, 2490000.0),
        melting=216.38,
        pressure_uncertainty=0.015,
        density=(0.5266, 0.25693, 568.7, 0.28571),
        tension=_jasper(23.52, 0.0951),
        vapour_heat=(10.824, 0.004983, 17.751e-5, -23.137e-8, 8.98e-11),
        liquid_heat=(224830.0, -186.63, 0.95891),
        conductivity=(1.11047e-2, 1.9982, 0.3340),
        viscosity=(5.76151e-6, 0.9550, -0.0671),
        transport=_REFERENCE_FIT.format("Huber et al. 2004 and 2005"),
        index=_index(
            _KERL, 1.3974, -4.9e-4, 20.0, "Kerl and Varchmin 1995", "TRC tables (from memory)"
        ),
    )
)
"""n-octane."""

NONANE = _build(
    _Organic(
        name="n-nonane",
        cas="111-84-2",
        aliases=("nonane", "C9H20"),
        molar_mass=128.2551e-3,
        diffusion_volume=189.30,
        wagner=(-8.32886, 2.25707, -3.8257, -3.732),
        critical=(594.9, 2290000.0),
        melting=219.66,
        pressure_uncertainty=0.015,
        density=(0.46321, 0.25444, 594.6, 0.28571),
        tension=_jasper(24.72, 0.0935),
        vapour_heat=(12.152, 0.004575, 20.416e-5, -26.777e-8, 10.465e-11),
        liquid_heat=(383080.0, -1139.8, 2.7101),
        conductivity=(1.04978e-2, 1.9212, 0.3769),
        viscosity=(5.47270e-6, 0.9601, -0.0598),
        transport=_REFERENCE_FIT.format("Huber et al. 2004 and 2005"),
        index=_index(_KERL, 1.4058, -4.7e-4, 20.0, "n-octane (Kerl and Varchmin 1995)"),
    )
)
"""n-nonane."""
