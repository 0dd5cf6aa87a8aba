"""Shared unknowns put into a bench, a cloud or the angles of its tables."""

import numpy as np

from scatterfit import matter
from scatterfit.apparatus.keys import HUMIDITY, KEYS_OF
from scatterfit.apparatus.restated import value_in, with_value
from scatterfit.constants import ICE_POINT
from scatterfit.measured_series.unknowns import moved_value


def moved(apparatus, unknowns, x):
    """Return a pulse's bench moved by the shared coordinates.

    A pulse's own values keep their differences: what is shared is the factor or the shift. Angles
    are left to the tables, the common errors of the model and the state of the gas to the cloud.

    Parameters
    ----------
    apparatus : Apparatus
        The pulse's bench.
    unknowns : sequence of Unknown
        What is shared.
    x : array_like, shape (k,)
        Coordinates [SI].

    Returns
    -------
    bench : Apparatus
        Moved.
    """
    for unknown, coordinate in zip(unknowns, x, strict=True):
        if unknown.by_bench:
            value = value_in(apparatus, unknown.key)
            value = unknown.value if value is None else value
            apparatus = with_value(apparatus, unknown.key,
                                   moved_value(unknown.kind, value, coordinate))
    return apparatus


def angle_shifts(apparatus, unknowns, x):
    """Return the shift of each detector's angle.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    unknowns : sequence of Unknown
        What is shared.
    x : array_like, shape (k,)
        Coordinates [SI].

    Returns
    -------
    shifts : tuple of float
        One a detector [rad].
    """
    place = dict(zip((u.key for u in unknowns), x, strict=True))
    return tuple(float(place.get(f"detector.{d.column}.angle_deg", 0.0))
                 for d in apparatus.detectors)


def in_cloud(apparatus, unknown, x):
    """Return a shared unknown as a parameter of the cloud, and its derivative.

    Parameters
    ----------
    apparatus : Apparatus
        The pulse's bench, where the parameter is zero.
    unknown : Unknown
        One with a :func:`cloud_name`.
    x : float
        Coordinate [SI].

    Returns
    -------
    value, slope : float
        Parameter and its derivative by the coordinate [any].
    """
    value = value_in(apparatus, unknown.key)
    if unknown.key.endswith("dew_point_K"):
        pressure = matter.substance(apparatus.vapour.substance).saturation_pressure
        at, near, start = (float(np.log(pressure(t))) for t in (value + x, value + x + 0.01, value))
        return at - start, (near - at) / 0.01
    there = moved_value(unknown.kind, value, x)
    slope = {"factor": 1.0, "shift": 1.0 / there, "inverse": -there}[unknown.kind.way]
    return float(np.log(there / value)), slope


def stands_for(apparatus, key):
    """Return what a bench without a key has in its place [SI], or ``None``.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    key : str
        Key path.

    Returns
    -------
    value : float or None
        The diffusivity of the tables; nothing else can be freed without a value [SI].
    """
    value = value_in(apparatus, key)
    if value is None and key == "vapour.diffusivity_mm2_s":
        substance = matter.substance(apparatus.vapour.substance)
        return float(matter.diffusivity(substance, matter.carrier(apparatus.carrier))(ICE_POINT))
    return value


def humidity_key(apparatus):
    """Return the key path of the bench's statement of its vapour.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.

    Returns
    -------
    key : str
        One of the four.
    """
    return next(f"vapour.{name}" for name in HUMIDITY
                if getattr(apparatus.vapour, KEYS_OF["vapour"][name].field) is not None)
