"""The bench as frozen records, SI inside: what the chamber file says, checked."""

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Beam:
    """A laser beam."""

    wavelength: float
    """Vacuum wavelength [m]."""
    polarization: float | None
    """Angle of the electric field from the scattering plane [rad]; ``None`` is unpolarized."""
    name: str | None = None
    """What detectors call it, where there are several."""
    refractive_index: complex | None = None
    """Of the liquid against vacuum at this wavelength, n + ik [-]; ``None``: the vapour's."""


@dataclass(frozen=True)
class Detector:
    """One detector of scattered light at a fixed angle."""

    column: str
    """Trace column it fills."""
    angle: float
    """Scattering angle of its axis inside the gas [rad], 0 is forward."""
    half_angle: float
    """Half angle of its circular acceptance cone [rad]."""
    gain: float | None = None
    """Volts per unit of collected scattering coefficient, V = gain n C_coll [V m]."""
    time_constant: float = 0.0
    """First-order low-pass [s]."""
    full_scale: float | None = None
    """Largest voltage the digitizer can show [V]."""
    dark: float | None = None
    """Electronic offset with the laser off [V]."""
    volume: float | None = None
    """Viewed volume [m^3]."""
    beam: str | None = None
    """Name of the beam whose light it collects; ``None``: there is one."""


@dataclass(frozen=True)
class Transmission:
    """The transmitted beam."""

    column: str
    """Trace column it fills."""
    path: float
    """Length of cloud it crosses [m]."""
    half_angle: float = 0.0
    """Acceptance of its receiver [rad]."""
    dark: float = 0.0
    """Reading with the laser off [V]."""
    beam: str | None = None
    """Name of the beam it receives; ``None``: there is one."""


@dataclass(frozen=True)
class Reference:
    """Laser-power monitor."""

    column: str
    """Trace column it fills."""
    dark: float = 0.0
    """Reading with the laser off [V]."""
    beam: str | None = None
    """Name of the beam it monitors; ``None``: all."""


@dataclass(frozen=True)
class PressureGauge:
    """Absolute chamber pressure."""

    column: str
    """Trace column it fills."""
    offset: float = 0.0
    """Added to every reading [Pa]."""
    time_constant: float = 0.0
    """First-order lag of the gauge [s]."""


@dataclass(frozen=True)
class Vapour:
    """The condensing substance and how much of it there is (exactly one of four)."""

    substance: str
    """Canonical name as in ``matter``."""
    mole_fraction: float | None = None
    """Mole fraction in the moist gas before the expansion [-]."""
    partial_pressure: float | None = None
    """At the chamber's state [Pa]."""
    saturation_ratio: float | None = None
    """At the chamber's state, over the liquid [-]."""
    dew_point: float | None = None
    """At the chamber's state [K]."""
    refractive_index: complex | None = None
    """Of the liquid against vacuum, n + ik [-]; ``None``: the built-in correlation."""
    overrides: Mapping[str, float] = field(default_factory=dict)
    """Property name in ``matter`` to a constant in SI, e.g. ``{"density": 998.0}``."""
    mass_accommodation: float = 1.0
    """Mass accommodation coefficient [-]."""
    thermal_accommodation: float = 1.0
    """Thermal accommodation coefficient [-]."""


@dataclass(frozen=True)
class Seed:
    """Seed particles; its presence says droplets are born on them, not by nucleation."""

    concentration: float | None = None
    """At the chamber's state [1/m^3]."""
    diameter: float | None = None
    """Particle diameter [m]."""


@dataclass(frozen=True)
class Background:
    """Larger particles in the gas, which take droplets and vapour away."""

    concentration: float
    """At the chamber's state [1/m^3]."""
    diameter: float
    """Particle diameter [m]."""
    detected_diameter: float | None = None
    """Diameter from which on droplets are no longer swept up [m]; ``None``: the particles'."""


@dataclass(frozen=True)
class Chamber:
    """The gas before the expansion, and the path of light to the detectors."""

    temperature: float
    """[K]."""
    pressure: float | None = None
    """[Pa]; ``None``: the start of the pressure trace."""
    path: float = 0.0
    """Cloud crossed by the light in all, on its way in and out to a detector [m]."""
    width: float | None = None
    """Smallest inner width [m]."""


@dataclass(frozen=True)
class GasState:
    """A stated state of the gas, for benches without a pressure trace."""

    temperature: float
    """[K]."""
    pressure: float
    """[Pa]."""


@dataclass(frozen=True)
class Pulse:
    """The nucleation hold, for benches without a pressure trace."""

    hold: float | None = None
    """Effective duration [s]."""
    temperature: float | None = None
    """[K]."""
    pressure: float | None = None
    """[Pa]."""


@dataclass(frozen=True)
class Analysis:
    """Choices of the analysis."""

    baseline: tuple[float, float] | None = None
    """Range of time without droplets [s]."""
    window: tuple[float, float] | None = None
    """Range of time to fit [s]."""
    reference_radius: float = 1.0e-6
    """Where growth rates are quoted [m]."""
    max_radius: float = 10.0e-6
    """Largest radius considered [m]."""
    growth_scale: float = 1.0
    """Measured growth rate over the computed one, as other pulses have it [-]."""


@dataclass(frozen=True)
class Correlations:
    """How the errors of stated values hang together."""

    of: tuple[str, ...]
    """Key paths."""
    matrix: tuple[tuple[float, ...], ...]
    """Correlation coefficients in the same order, symmetric, ones on the diagonal [-]."""


@dataclass(frozen=True)
class Apparatus:
    """One bench, complete."""

    beam: Beam
    """The beam; where there are several, the first."""
    detectors: tuple[Detector, ...]
    vapour: Vapour
    carrier: Mapping[str, float]
    """Canonical gas name to mole fraction of the dry gas, sums to one."""
    chamber: Chamber
    transmission: Transmission | None = None
    reference: Reference | None = None
    pressure: PressureGauge | None = None
    seed: Seed | None = None
    background: Background | None = None
    growth: GasState | None = None
    pulse: Pulse | None = None
    analysis: Analysis = field(default_factory=Analysis)
    correlations: Correlations | None = None
    sigmas: Mapping[str, float] = field(default_factory=dict)
    """Key path as the contract spells it, without ``_sigma``, to standard uncertainty in SI.

    For example ``{"chamber.temperature_K": 0.15, "detector.scatter1_V.angle_deg": 0.0026}``
    (kelvin, radian): the unit is that of the record's field, not of the key's suffix. A sigma of
    zero is left out, as it says nothing. ``vapour.refractive_index_k`` is that of the absorbing
    part where the file gives two, ``gas.carrier.helium`` that of a mole fraction, and
    ``beam.red.wavelength_nm`` that of a beam that has a name.
    """
    other_beams: tuple[Beam, ...] = ()
    """Beams after the first."""

    @property
    def beams(self) -> tuple[Beam, ...]:
        """Return every beam."""
        return (self.beam, *self.other_beams)

    def path_of(self, beam: Beam) -> str:
        """Return the start of a beam's key paths."""
        return f"beam.{beam.name}" if self.other_beams else "beam"

    def beam_number(self, record: Detector | Transmission | Reference) -> int:
        """Return the position among the beams of the one that a record names."""
        names = [beam.name for beam in self.beams]
        return 0 if record.beam is None else names.index(record.beam)
