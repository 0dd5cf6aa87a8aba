"""What the pulses of a bench share and do not know: each as a coordinate about the chamber file."""

from dataclasses import dataclass

import numpy as np

from scatterfit.apparatus.keys import HUMIDITY
from scatterfit.apparatus.overrides import split_path

SCALE, BEND, DEPLETION = "analysis.growth_scale", "bend", "depletion"
"""Common errors of the model; the first is a key of the chamber file."""
LABELS = {BEND: "shape of the growth law", DEPLETION: "computed depletion"}


@dataclass(frozen=True)
class Kind:
    """How a key of the chamber file is varied."""

    way: str
    """``"factor"``: the coordinate is ln of a factor; ``"shift"``: it is added; ``"inverse"``: it
    is added to one over the value."""
    sigma: float
    """Standard deviation of the coordinate where the chamber file states none [SI]."""
    step: float
    """Of numerical derivatives [SI]."""
    reach: float
    """How far one iteration may go [SI]."""


KINDS = {
    "detector.gain_V_m": Kind("factor", 1.0, 0.01, 0.3),
    "detector.angle_deg": Kind("shift", np.radians(0.5), np.radians(0.01), np.radians(0.3)),
    "transmission.path_mm": Kind("factor", 0.2, 0.01, 0.2),
    "transmission.dark_V": Kind("shift", 0.02, 1e-3, 0.1),
    "pressure.offset_kPa": Kind("shift", 200.0, 50.0, 500.0),
    "vapour.mole_fraction": Kind("factor", 0.02, 2e-3, 0.03),
    "vapour.partial_pressure_kPa": Kind("factor", 0.02, 2e-3, 0.03),
    "vapour.saturation_ratio": Kind("factor", 0.02, 2e-3, 0.03),
    "vapour.dew_point_K": Kind("shift", 0.3, 0.03, 0.5),
    "vapour.refractive_index": Kind("shift", 1e-3, 2e-4, 2e-3),
    "vapour.diffusivity_mm2_s": Kind("factor", 0.03, 0.01, 0.1),
    "vapour.mass_accommodation": Kind("inverse", 3.0, 0.02, 1.0),
    "vapour.thermal_accommodation": Kind("inverse", 3.0, 0.02, 1.0),
    "chamber.temperature_K": Kind("shift", 0.5, 0.1, 1.0),
    "chamber.path_mm": Kind("factor", 0.2, 0.01, 0.2),
    "growth.temperature_K": Kind("shift", 0.5, 0.1, 1.0),
    "growth.pressure_kPa": Kind("factor", 5e-3, 2e-3, 0.02),
    SCALE: Kind("factor", 0.05, 0.01, 0.1),
    BEND: Kind("shift", 0.01, 5e-3, 0.03),
    DEPLETION: Kind("factor", 0.015, 0.01, 0.1),
}
"""Table and name of a key to how it is varied. Sigmas are for keys that a user frees without
stating one (common practice, no source)."""
LEAST_INVERSE = 0.67
"""Least of one over an accommodation coefficient: it cannot exceed one, noise can say so."""


@dataclass(frozen=True)
class Unknown:
    """One shared unknown."""

    key: str
    """Key path, or a common error of the model."""
    kind: Kind
    value: float
    """What the chamber file says, or stands for [SI]."""
    sigma: float
    """Standard deviation of the coordinate beforehand [SI]."""
    stated: bool
    """Whether the chamber file gave it."""
    written: bool
    """Whether the new chamber file gets it."""

    def at(self, x):
        """Return the value at a coordinate.

        Parameters
        ----------
        x : float
            Coordinate [SI].
        """
        return moved_value(self.kind, self.value, x)

    def sigma_at(self, x, sigma):
        """Return the standard uncertainty of the value from that of the coordinate.

        Parameters
        ----------
        x, sigma : float
            Coordinate and its standard uncertainty [SI].
        """
        value = self.at(x)
        slope = {"factor": value, "shift": 1.0, "inverse": value**2}[self.kind.way]
        return abs(slope) * sigma

    @property
    def by_bench(self):
        """Whether it acts by another bench, not by another cloud or other tables."""
        return not (self.key in (SCALE, BEND, DEPLETION) or self.key.endswith(".angle_deg")
                    or cloud_name(self.key))

    @property
    def label(self):
        """Return its name for people."""
        return LABELS.get(self.key, self.key)


def moved_value(kind, value, x):
    """Return a value moved by a coordinate.

    Parameters
    ----------
    kind : Kind
        How it is varied.
    value : float
        Where the coordinate is zero [SI].
    x : float
        Coordinate [SI].

    Returns
    -------
    moved : float
        The other value [SI].

    Examples
    --------
    >>> moved_value(KINDS["vapour.mass_accommodation"], 0.5, 2.0)
    0.25
    """
    if kind.way == "factor":
        return value * float(np.exp(x))
    if kind.way == "shift":
        return value + float(x)
    return 1.0 / max(1.0 / value + float(x), LEAST_INVERSE)


def coordinate_of(kind, value, sigma):
    """Return the standard deviation of the coordinate from that of the value.

    Parameters
    ----------
    kind : Kind
        How it is varied.
    value, sigma : float
        Value and its standard uncertainty [SI].

    Returns
    -------
    sigma : float
        Of the coordinate [SI].
    """
    slope = {"factor": value, "shift": 1.0, "inverse": value**2}[kind.way]
    return abs(sigma / slope)


def kind_of(key):
    """Return how a key is varied, or ``None`` for one that cannot be shared.

    Parameters
    ----------
    key : str
        Key path, or a common error of the model.

    Returns
    -------
    kind : Kind or None
        Its row of ``KINDS``.
    """
    if key in KINDS:
        return KINDS[key]
    parts = split_path(key)
    return KINDS.get(f"{parts[0]}.{parts[2]}") if parts else None


def cloud_name(key):
    """Return the parameter of a cloud that stands for a shared unknown, or ``None``.

    Parameters
    ----------
    key : str
        Key path, or a common error of the model.

    Returns
    -------
    name : str or None
        Field of ``Cloud``.

    Examples
    --------
    >>> cloud_name("vapour.dew_point_K"), cloud_name("transmission.path_mm")
    ('vapour', None)
    """
    table, _, name = key.partition(".")
    if name == "temperature_K":
        return "temperature"
    if table == "vapour" and name in HUMIDITY:
        return "vapour"
    return {"vapour.mass_accommodation": "accommodation"}.get(key)


def stated_keys(apparatus):
    """Return the keys that can be shared and are stated with a sigma.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.

    Returns
    -------
    keys : list of str
        Key paths, in the order of ``KINDS``.
    """
    found = [key for key in apparatus.sigmas if kind_of(key) is not None]
    order = list(KINDS)
    return sorted(found, key=lambda key: order.index(_row(key)))


def _row(key):
    table, _, name = split_path(key)
    return f"{table}.{name}"
