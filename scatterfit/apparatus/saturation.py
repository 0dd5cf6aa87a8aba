"""The vapour before the expansion: it cannot be above saturation, or it would condense there."""

import math
from dataclasses import replace

from scatterfit import matter
from scatterfit.apparatus.keys import HUMIDITY, KEYS_OF
from scatterfit.apparatus.values import fail
from scatterfit.units import from_si

_TOLERANCE = 0.02
_SIGMAS_ALLOWED = 2.0


def saturation_before(bench, pressure=None):
    """Return the saturation ratio before the expansion, over the liquid.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    pressure : float, optional
        Chamber pressure before the expansion; needed where the mole fraction is stated [Pa].

    Returns
    -------
    ratio : float or None
        Vapour pressure over that of the liquid at the chamber's temperature [-]; ``None`` where
        it takes a pressure to know.
    """
    vapour = bench.vapour
    if vapour.saturation_ratio is not None:
        return vapour.saturation_ratio
    substance = matter.substance(vapour.substance).with_overrides(vapour.overrides)
    saturated = float(substance.saturation_pressure(bench.chamber.temperature))
    if vapour.dew_point is not None:
        return float(substance.saturation_pressure(vapour.dew_point)) / saturated
    if vapour.partial_pressure is not None:
        return vapour.partial_pressure / saturated
    return None if pressure is None else vapour.mole_fraction * pressure / saturated


def check_saturation(bench, pressure, where):
    """Refuse vapour above saturation before the expansion, or above the pressure itself.

    Two percent are allowed, which is what vapour pressures of different sources differ by
    (common practice, no source), and two standard uncertainties of what is stated.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    pressure : float or None
        Chamber pressure before the expansion, where it is known [Pa].
    where : str
        What messages call the file.

    Raises
    ------
    ChamberFileError
        If the vapour would condense before the expansion.
    """
    key = _stated_key(bench.vapour)
    path = f"vapour.{key.name}"
    value = getattr(bench.vapour, key.field)
    written = float(f"{from_si(value, key.unit):.10g}")
    partial = bench.vapour.partial_pressure
    if None not in (partial, pressure) and partial >= pressure:
        remedy = f"must be below the chamber's pressure, {pressure / 1e3:.6g} kPa"
        fail(where, path, written, remedy)
    ratio = saturation_before(bench, pressure)
    if ratio is None:
        return
    if ratio > 1 + _TOLERANCE + _SIGMAS_ALLOWED * _sigma(bench, pressure):
        at = f"{bench.chamber.temperature:.6g} K"
        if key.name == "mole_fraction":
            at += f" and {pressure / 1e3:.6g} kPa"
        most = bench.chamber.temperature if key.name == "dew_point_K" else written / ratio
        unit = f" {key.unit}" if key.unit else ""
        remedy = (f"the vapour is above saturation before the expansion, {ratio:.4g} times that at "
                  f"{at}; at most {most:.4g}{unit} is possible")
        fail(where, path, written, remedy)


def _stated_key(vapour):
    keys = (KEYS_OF["vapour"][name] for name in HUMIDITY)
    return next(key for key in keys if getattr(vapour, key.field) is not None)


def _sigma(bench, pressure):
    """Return the standard uncertainty of the saturation ratio from the stated sigmas [-]."""
    here = saturation_before(bench, pressure)
    key = _stated_key(bench.vapour)
    changes = []
    sigma = bench.sigmas.get(f"vapour.{key.name}", 0.0)
    vapour = replace(bench.vapour, **{key.field: getattr(bench.vapour, key.field) + sigma})
    changes.append((replace(bench, vapour=vapour), pressure))
    sigma = bench.sigmas.get("chamber.temperature_K", 0.0)
    chamber = replace(bench.chamber, temperature=bench.chamber.temperature + sigma)
    changes.append((replace(bench, chamber=chamber), pressure))
    if pressure is not None:
        changes.append((bench, pressure + bench.sigmas.get("chamber.pressure_kPa", 0.0)))
    return math.sqrt(sum((saturation_before(*change) - here) ** 2 for change in changes))
