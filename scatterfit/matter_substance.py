"""Ground floor: a liquid and its vapour as a record, and constants that override it."""

import difflib
import math
from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import partial

from scatterfit.errors import InvalidInputError
from scatterfit.matter_forms import anchored, constant, constant_index
from scatterfit.matter_records import Property, RefractiveIndex

PRESSURE_ANCHOR = 298.15
"""Where a stated saturation pressure holds [K]."""

OVERRIDABLE: Mapping[str, str] = {
    "density": "kg/m^3",
    "surface_tension": "N/m",
    "latent_heat": "J/mol",
    "vapour_heat_capacity": "J/(mol K)",
    "liquid_heat_capacity": "J/(mol K)",
    "vapour_conductivity": "W/(m K)",
    "vapour_viscosity": "Pa s",
    "saturation_pressure": f"Pa at {PRESSURE_ANCHOR:g} K",
    "diffusivity": "m^2/s at 273.15 K and 101325 Pa",
    "molar_mass": "kg/mol",
    "refractive_index": "-",
}
"""Names that ``Substance.with_overrides`` takes, with their units."""


@dataclass(frozen=True)
class Substance:
    """A liquid and its vapour; the vapour is an ideal gas."""

    name: str
    """Canonical name."""
    cas: str
    """CAS registry number."""
    aliases: tuple[str, ...]
    """Other names it is found by."""
    molar_mass: float
    """[kg/mol]."""
    critical_temperature: float
    """[K]."""
    diffusion_volume: float
    """Fuller's diffusion volume of the vapour [cm^3/mol], as in the published tables."""
    saturation_pressure: Property
    """Over the flat (supercooled) liquid [Pa]."""
    density: Property
    """Of the liquid [kg/m^3]."""
    surface_tension: Property
    """[N/m]."""
    latent_heat: Property
    """Of vaporization, R T^2 d(ln p)/dT of ``saturation_pressure`` [J/mol]."""
    vapour_heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    liquid_heat_capacity: Property
    """At constant pressure [J/(mol K)]."""
    vapour_conductivity: Property
    """Thermal conductivity of the dilute vapour [W/(m K)]."""
    vapour_viscosity: Property
    """Of the dilute vapour [Pa s]."""
    refractive_index: RefractiveIndex
    """Of the liquid against vacuum [-]."""
    overrides: Mapping[str, float] = field(default_factory=dict, hash=False)
    """Constants of the chamber file that replaced correlations, in SI."""

    def with_overrides(self, overrides: Mapping[str, float]) -> "Substance":
        """Return the substance with constants in place of correlations.

        Parameters
        ----------
        overrides : mapping
            Name as in ``OVERRIDABLE`` to a value in its unit. A saturation pressure holds at
            298.15 K and a diffusivity at 273.15 K; both keep the temperature dependence of the
            correlation. A refractive index may be complex, n + ik.

        Returns
        -------
        substance : Substance
            A new record; the source of every replaced property reads ``chamber file``.

        Raises
        ------
        InvalidInputError
            If a name is unknown or a value is not a positive finite number.

        Examples
        --------
        >>> from scatterfit.matter import substance
        >>> water = substance("water").with_overrides({"density": 990.0})
        >>> float(water.density(280.0)), water.density.source
        (990.0, 'chamber file')
        """
        for name, value in overrides.items():
            check_override(name, value)
        changes = {
            name: self._replacement(name, value)
            for name, value in overrides.items()
            if name != "diffusivity"
        }
        return replace(self, **changes, overrides={**self.overrides, **overrides})

    def _replacement(self, name, value):
        """Return the field that takes the place of a correlation."""
        if name == "molar_mass":
            return float(value)
        old = getattr(self, name)
        if name == "refractive_index":
            index = complex(value) if complex(value).imag else float(complex(value).real)
            function = partial(constant_index, value=index)
            return RefractiveIndex(function, "chamber file", (0.0, math.inf), (0.0, math.inf), 0.0)
        if name == "saturation_pressure":
            function = partial(
                anchored, function=old.function, value=float(value), anchor=PRESSURE_ANCHOR
            )
            source = f"chamber file at {PRESSURE_ANCHOR:g} K, elsewhere as {old.source}"
            return replace(old, function=function, source=source)
        return replace(
            old,
            function=partial(constant, value=float(value)),
            source="chamber file",
            range=(0.0, math.inf),
            relative_uncertainty=0.0,
        )


def check_override(name, value):
    """Refuse an override that no property could take.

    Parameters
    ----------
    name : str
        Name of the property.
    value : complex
        Its value, in the unit that ``OVERRIDABLE`` gives [-].

    Raises
    ------
    InvalidInputError
        If the name is unknown, with the nearest known one, or the value is not positive.

    Examples
    --------
    >>> check_override("density", 998.0)
    """
    if name not in OVERRIDABLE:
        raise InvalidInputError(unknown("property", name, OVERRIDABLE))
    number = complex(value)
    real_only = name != "refractive_index" and number.imag
    if real_only or not (0 < number.real < math.inf and 0 <= number.imag < math.inf):
        message = f"{name} must be a positive number [{OVERRIDABLE[name]}], but it is {value!r}"
        raise InvalidInputError(message)


def unknown(kind, name, known):
    """Return the one line that says a name is unknown, and which known one is nearest.

    Parameters
    ----------
    kind : str
        What the name should name.
    name : str
        The name that is not known.
    known : iterable of str
        The names that are.

    Returns
    -------
    message : str
        The line.

    Examples
    --------
    >>> unknown("gas", "argonn", ["argon", "helium"])
    "unknown gas 'argonn': did you mean 'argon'? Known: argon, helium"
    """
    known = list(known)
    near = difflib.get_close_matches(str(name).strip().casefold(), known, n=1, cutoff=0.5)
    hint = f" did you mean {near[0]!r}?" if near else ""
    return f"unknown {kind} {name!r}:{hint} Known: {', '.join(known)}"
