"""The chamber file as a table: every key with its unit, its bounds and what it means.

Checking, the commented file of ``scatterfit new`` and the documentation all read this table,
so they cannot disagree.
"""

from dataclasses import dataclass

INFINITY = float("inf")


@dataclass(frozen=True)
class Bounds:
    """The values a number may have, in the unit of its key."""

    low: float = -INFINITY
    """Lower end."""
    high: float = INFINITY
    """Upper end."""
    open_low: bool = False
    """Whether the lower end itself is excluded."""
    open_high: bool = False
    """Whether the upper end itself is excluded."""

    def hold(self, value):
        """Return whether a value lies inside."""
        above = value > self.low if self.open_low else value >= self.low
        below = value < self.high if self.open_high else value <= self.high
        return above and below

    def __str__(self):
        """Return the bounds in words."""
        low = f"{'above' if self.open_low else 'at least'} {self.low:g}"
        high = f"{'below' if self.open_high else 'at most'} {self.high:g}"
        if self.low == -INFINITY:
            return "any number" if self.high == INFINITY else high
        return low if self.high == INFINITY else f"{low} and {high}"


@dataclass(frozen=True)
class Key:
    """One key of the chamber file."""

    table: str
    """Table it stands in."""
    name: str
    """Its name, unit included."""
    field: str
    """Field of the table's record."""
    unit: str = ""
    """Suffix of ``units.UNITS``; empty for a pure number or a text."""
    kind: str = "number"
    """One of ``number``, ``text``, ``column``, ``range``, ``polarization``, ``index``,
    ``carrier``, ``key paths``, ``matrix``."""
    bounds: Bounds = Bounds()
    """Values allowed, in the key's unit."""
    required: bool = False
    """Whether the table is incomplete without it."""
    default: object = None
    """What holds when it is absent, in the key's unit; ``None``: nothing does."""
    property_name: str | None = None
    """For what overrides a correlation: the property's name in ``matter``."""
    example: str = ""
    """A value as it would be written in the file."""
    doc: str = ""
    """What it means, one line."""

    @property
    def takes_sigma(self):
        """Whether a sibling ``NAME_sigma`` may stand beside it."""
        return self.kind in {"number", "polarization", "index"}

    @property
    def has_value_without(self):
        """Whether a sigma makes sense where the key itself is absent."""
        return self.default is not None or self.property_name is not None or self.kind == "index"


@dataclass(frozen=True)
class Table:
    """One table of the chamber file."""

    name: str
    """Its name."""
    required: bool
    """Whether a bench is incomplete without it."""
    doc: str
    """What it describes, one line."""
    repeated: bool = False
    """Whether it is an array of tables."""
    several: bool = False
    """Whether it may be one table or an array of tables with names."""

    @property
    def heading(self):
        """Return how its heading is written in the file."""
        return f"[[{self.name}]]" if self.repeated else f"[{self.name}]"


TABLES = (
    Table("beam", True, "the laser beam", several=True),
    Table("detector", False, "one detector of scattered light; as many as there are", True),
    Table("transmission", False, "the transmitted beam"),
    Table("reference", False, "laser-power monitor: optical columns are divided by it"),
    Table("pressure", False, "absolute chamber pressure, measured"),
    Table("vapour", True, "the substance that condenses, and how much of it there is"),
    Table("gas", True, "the carrier gas"),
    Table("seed", False, "seed particles: droplets are born on them; may be empty"),
    Table("background", False, "larger particles in the gas, which take droplets and vapour away "
          "before they are seen: rates are corrected for them"),
    Table("chamber", True, "the gas before the expansion"),
    Table("growth", False, "undisturbed gas during growth, where no pressure is measured"),
    Table("pulse", False, "nucleation hold, where no pressure is measured"),
    Table("analysis", False, "choices of the analysis"),
    Table("correlations", False, "how the errors of values stated with a sigma hang together"),
)
"""Every table, in the order in which light and gas are described."""

_POSITIVE = Bounds(0, open_low=True)
_NOT_NEGATIVE = Bounds(0)
_TEMPERATURE = Bounds(100, 600)
_PRESSURE = Bounds(0, 1e5, open_low=True)
_ACCOMMODATION = Bounds(0, 1, open_low=True)
_HALF_ANGLE_MAX = 20.0

HUMIDITY = ("mole_fraction", "partial_pressure_kPa", "saturation_ratio", "dew_point_K")
"""The four ways to say how much vapour there is; exactly one holds."""

KEYS = (
    Key("beam", "wavelength_nm", "wavelength", "nm", bounds=Bounds(200, 2000), required=True,
        example="532.0", doc="vacuum wavelength"),
    Key("beam", "polarization", "polarization", "deg", kind="polarization",
        bounds=Bounds(-180, 180), required=True, example='"perpendicular"',
        doc='electric field against the scattering plane: "perpendicular", "parallel", '
            '"unpolarized", or degrees from the plane'),
    Key("beam", "name", "name", kind="text", example='"green"',
        doc="what a detector calls it; required where there are several, then written [[beam]]"),
    Key("beam", "refractive_index", "refractive_index", kind="index", example="1.3368",
        doc="of the liquid against vacuum at this wavelength, instead of the one in [vapour]"),
    Key("detector", "column", "column", kind="column", required=True, example='"scatter1_V"',
        doc="trace column it fills"),
    Key("detector", "angle_deg", "angle", "deg", bounds=Bounds(0, 180), required=True,
        example="30.0", doc="scattering angle of its axis inside the gas, 0 is forward"),
    Key("detector", "half_angle_deg", "half_angle", "deg",
        bounds=Bounds(0, _HALF_ANGLE_MAX, open_low=True), required=True, example="2.0",
        doc="half angle of its circular acceptance cone"),
    Key("detector", "gain_V_m", "gain", "V_m", bounds=_POSITIVE, example="2.0e5",
        doc="volts per unit of collected scattering coefficient; gives number from brightness"),
    Key("detector", "time_constant_ms", "time_constant", "ms", bounds=_NOT_NEGATIVE, default=0.0,
        example="0.02", doc="first-order low-pass of detector and amplifier"),
    Key("detector", "full_scale_V", "full_scale", "V", bounds=_POSITIVE, example="10.0",
        doc="largest voltage the digitizer can show; samples there are left out"),
    Key("detector", "dark_V", "dark", "V", example="0.0",
        doc="electronic offset with the laser off"),
    Key("detector", "volume_mm3", "volume", "mm3", bounds=_POSITIVE, example="5.0",
        doc="viewed volume; adds counting noise"),
    Key("detector", "beam", "beam", kind="text", example='"green"',
        doc="name of the beam whose light it collects, where there are several"),
    Key("transmission", "column", "column", kind="column", required=True,
        example='"transmitted_V"', doc="trace column it fills"),
    Key("transmission", "path_mm", "path", "mm", bounds=_POSITIVE, required=True, example="120.0",
        doc="length of cloud the beam crosses"),
    Key("transmission", "half_angle_deg", "half_angle", "deg", bounds=Bounds(0, _HALF_ANGLE_MAX),
        default=0.0, example="0.2",
        doc="acceptance of its receiver; forward light collected there is not lost"),
    Key("transmission", "dark_V", "dark", "V", default=0.0, example="0.0",
        doc="reading with the laser off"),
    Key("transmission", "beam", "beam", kind="text", example='"green"',
        doc="name of the beam it receives, where there are several"),
    Key("reference", "column", "column", kind="column", required=True, example='"monitor_V"',
        doc="trace column it fills"),
    Key("reference", "dark_V", "dark", "V", default=0.0, example="0.0",
        doc="reading with the laser off"),
    Key("reference", "beam", "beam", kind="text", example='"green"',
        doc="name of the one beam it monitors; without it, all columns are divided by it"),
    Key("pressure", "column", "column", kind="column", required=True, example='"pressure_kPa"',
        doc="trace column it fills"),
    Key("pressure", "offset_kPa", "offset", "kPa", default=0.0, example="0.0",
        doc="added to every reading"),
    Key("pressure", "time_constant_ms", "time_constant", "ms", bounds=_NOT_NEGATIVE, default=0.0,
        example="0.0", doc="first-order lag of the gauge"),
    Key("vapour", "substance", "substance", kind="text", required=True, example='"water"',
        doc="name or CAS number"),
    Key("vapour", "mole_fraction", "mole_fraction",
        bounds=Bounds(0, 1, open_low=True, open_high=True), example="0.012",
        doc="in the moist gas before the expansion"),
    Key("vapour", "partial_pressure_kPa", "partial_pressure", "kPa", bounds=_PRESSURE,
        example="1.1", doc="at the chamber's state, instead of mole_fraction"),
    Key("vapour", "saturation_ratio", "saturation_ratio", bounds=_POSITIVE, example="0.40",
        doc="at the chamber's state over the liquid, instead of mole_fraction"),
    Key("vapour", "dew_point_K", "dew_point", "K", bounds=_TEMPERATURE, example="281.0",
        doc="at the chamber's state, instead of mole_fraction"),
    Key("vapour", "refractive_index", "refractive_index", kind="index", example="1.3368",
        doc="of the liquid against vacuum at the beam's wavelength: n, or [n, k] if it absorbs"),
    Key("vapour", "density_kg_m3", "density", "kg_m3", bounds=Bounds(100, 25000),
        property_name="density", example="997.0", doc="density of the liquid"),
    Key("vapour", "surface_tension_N_m", "surface_tension", "N_m",
        bounds=Bounds(0, 2, open_low=True), property_name="surface_tension", example="0.0728",
        doc="surface tension of the liquid"),
    Key("vapour", "diffusivity_mm2_s", "diffusivity", "mm2_s", bounds=Bounds(0.1, 1000),
        property_name="diffusivity", example="22.0",
        doc="of the vapour in the carrier at 273.15 K and 101.325 kPa"),
    Key("vapour", "latent_heat_kJ_mol", "latent_heat", "kJ_mol", bounds=Bounds(1, 500),
        property_name="latent_heat", example="44.5", doc="molar heat of evaporation"),
    Key("vapour", "saturation_pressure_kPa", "saturation_pressure", "kPa",
        bounds=Bounds(0, 1e3, open_low=True), property_name="saturation_pressure",
        example="3.17",
        doc="over the liquid at 298.15 K; the built-in dependence on temperature stays"),
    Key("vapour", "vapour_heat_capacity_J_mol_K", "vapour_heat_capacity", "J_mol_K",
        bounds=Bounds(10, 2000), property_name="vapour_heat_capacity", example="33.6",
        doc="of the vapour at constant pressure"),
    Key("vapour", "liquid_heat_capacity_J_mol_K", "liquid_heat_capacity", "J_mol_K",
        bounds=Bounds(10, 5000), property_name="liquid_heat_capacity", example="75.3",
        doc="of the liquid at constant pressure"),
    Key("vapour", "vapour_conductivity_mW_m_K", "vapour_conductivity", "mW_m_K",
        bounds=Bounds(0.5, 500), property_name="vapour_conductivity", example="18.0",
        doc="thermal conductivity of the dilute vapour"),
    Key("vapour", "vapour_viscosity_uPa_s", "vapour_viscosity", "uPa_s",
        bounds=Bounds(0.5, 200), property_name="vapour_viscosity", example="9.5",
        doc="of the dilute vapour"),
    Key("vapour", "molar_mass_g_mol", "molar_mass", "g_mol", bounds=Bounds(1, 2000),
        property_name="molar_mass", example="18.015", doc="of the substance"),
    Key("vapour", "mass_accommodation", "mass_accommodation", bounds=_ACCOMMODATION, default=1.0,
        example="1.0", doc="mass accommodation coefficient"),
    Key("vapour", "thermal_accommodation", "thermal_accommodation", bounds=_ACCOMMODATION,
        default=1.0, example="1.0", doc="thermal accommodation coefficient"),
    Key("gas", "carrier", "carrier", kind="carrier", required=True, example='"argon"',
        doc="a name, or mole fractions of the dry gas such as {argon = 0.7, helium = 0.3}"),
    Key("seed", "concentration_per_cm3", "concentration", "per_cm3", bounds=_POSITIVE,
        example="1000.0", doc="seed particles per volume at the chamber's state"),
    Key("seed", "diameter_nm", "diameter", "nm", bounds=Bounds(0.5, 1e5), example="80.0",
        doc="diameter of the seed particles"),
    Key("background", "concentration_per_cm3", "concentration", "per_cm3", bounds=_NOT_NEGATIVE,
        required=True, example="5.0e4", doc="particles per volume at the chamber's state"),
    Key("background", "diameter_nm", "diameter", "nm", bounds=Bounds(5, 1e5), required=True,
        example="200.0", doc="their diameter"),
    Key("background", "detected_diameter_nm", "detected_diameter", "nm", bounds=Bounds(1, 1e5),
        example="200.0", doc="diameter from which on droplets are no longer swept up; that of the "
        "particles when absent"),
    Key("chamber", "temperature_K", "temperature", "K", bounds=_TEMPERATURE, required=True,
        example="296.15", doc="before the expansion"),
    Key("chamber", "pressure_kPa", "pressure", "kPa", bounds=_PRESSURE, example="92.0",
        doc="before the expansion; without it, the start of the pressure trace"),
    Key("chamber", "path_mm", "path", "mm", bounds=_NOT_NEGATIVE, default=0.0, example="120.0",
        doc="cloud crossed by the light in all, on its way in and out to a detector"),
    Key("chamber", "width_mm", "width", "mm", bounds=_POSITIVE, example="60.0",
        doc="smallest inner width; tells how long heat from the walls leaves the gas adiabatic"),
    Key("growth", "temperature_K", "temperature", "K", bounds=_TEMPERATURE, required=True,
        example="265.0", doc="during growth"),
    Key("growth", "pressure_kPa", "pressure", "kPa", bounds=_PRESSURE, required=True,
        example="70.0", doc="during growth"),
    Key("pulse", "hold_ms", "hold", "ms", bounds=_POSITIVE, example="1.0",
        doc="effective duration of nucleation"),
    Key("pulse", "temperature_K", "temperature", "K", bounds=_TEMPERATURE, example="241.0",
        doc="during the hold"),
    Key("pulse", "pressure_kPa", "pressure", "kPa", bounds=_PRESSURE, example="55.0",
        doc="during the hold"),
    Key("analysis", "baseline_ms", "baseline", "ms", kind="range", example="[-5.0, -1.0]",
        doc="time without droplets; found from the trace when absent"),
    Key("analysis", "window_ms", "window", "ms", kind="range", example="[0.0, 60.0]",
        doc="time to fit; found from the trace when absent"),
    Key("analysis", "reference_radius_um", "reference_radius", "um",
        bounds=Bounds(0, 100, open_low=True), default=1.0, example="1.0",
        doc="radius at which growth rates are quoted"),
    Key("analysis", "max_radius_um", "max_radius", "um", bounds=Bounds(0.1, 100), default=10.0,
        example="10.0", doc="largest radius considered"),
    Key("analysis", "growth_scale", "growth_scale", bounds=Bounds(0.2, 5), default=1.0,
        example="1.0", doc="measured growth rate over the computed one, as other pulses have it; "
                           "without its sigma that of the properties holds"),
    Key("correlations", "of", "of", kind="key paths", required=True,
        example='["chamber.temperature_K", "vapour.mole_fraction"]',
        doc="key paths, detectors as detector.COLUMN.KEY; one without a sigma is passed over"),
    Key("correlations", "matrix", "matrix", kind="matrix", required=True,
        example="[[1.0, 0.9], [0.9, 1.0]]",
        doc="correlation coefficients of their errors, in the same order"),
)
"""Every key, table by table."""

TABLE_BY_NAME = {table.name: table for table in TABLES}
"""Table name to its description."""

KEYS_OF = {table.name: {key.name: key for key in KEYS if key.table == table.name}
           for table in TABLES}
"""Table name to its keys by name."""


def key_table():
    """Return every key of the chamber file, for documentation and templates.

    Returns
    -------
    keys : tuple of Key
        One record a key, table by table.

    Examples
    --------
    >>> first = key_table()[0]
    >>> first.table, first.name, str(first.bounds), first.doc
    ('beam', 'wavelength_nm', 'at least 200 and at most 2000', 'vacuum wavelength')
    """
    return KEYS


def allowed_names(table):
    """Return every key name a table may hold, those with ``_sigma`` included.

    Parameters
    ----------
    table : str
        Name of a table.

    Returns
    -------
    names : tuple of str
        Key names.

    Examples
    --------
    >>> allowed_names("pressure")[:3]
    ('column', 'offset_kPa', 'offset_kPa_sigma')
    """
    names = []
    for key in KEYS_OF[table].values():
        names.append(key.name)
        if key.takes_sigma:
            names.append(f"{key.name}_sigma")
    return tuple(names)
