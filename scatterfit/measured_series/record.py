"""What a series says about its bench, in the units of the chamber file's keys."""

from dataclasses import dataclass, field

import numpy as np

from scatterfit.apparatus.keys import KEYS_OF
from scatterfit.apparatus.overrides import split_path
from scatterfit.measured_series.unknowns import BEND, DEPLETION
from scatterfit.units import from_si

SCHEMA = "scatterfit-calibration-1"


@dataclass(frozen=True)
class Shared:
    """One shared unknown before and after."""

    key: str
    label: str
    unit: str
    """Of the numbers, as the key spells it."""
    before: float
    before_sigma: float
    stated: bool
    """Whether the chamber file gave that sigma; else it is the usual one."""
    after: float
    sigma: float
    moved: float
    """By how many of the sigmas beforehand [-]."""
    narrowed: float
    """Sigma afterwards over that beforehand [-]."""
    written: bool
    informed: str
    """Which pulses and handles say so."""


@dataclass(frozen=True)
class Pair:
    """Two unknowns that pulses tell apart badly, and what they do fix."""

    first: str
    second: str
    correlation: float
    slope: float
    """Units of the first for one of the second [unit of the first per unit of the second]."""
    sigma: float
    """Of ``first - slope * second`` [unit of the first]."""
    unit: str


@dataclass(frozen=True)
class Row:
    """One pulse of the series."""

    name: str
    used: bool
    reasons: tuple = ()
    """Of (code, text)."""
    number: tuple | None = None
    """Value and standard uncertainty, those of the bench included [1/m^3]."""
    number_alone: float | None = None
    """Standard uncertainty at the joint bench [1/m^3]."""
    final_radius: float | None = None
    """[m]."""
    chi2_reduced: float | None = None
    excess: float | None = None
    """By how many sigmas it disagrees with the joint bench [-]."""
    weight: float | None = None
    left: dict = field(default_factory=dict)
    """Column to what is not explained, root mean square over the largest light [-]."""


@dataclass(frozen=True)
class Calibration:
    """What a series says about its bench."""

    shared: tuple
    """Of Shared."""
    keys: tuple
    """Key paths that the chamber file gets."""
    correlation: np.ndarray
    """Among them, shape (k, k) [-]."""
    pairs: tuple
    rows: tuple
    drifts: tuple
    held: tuple
    scatter: float
    rounds: int
    converged: bool
    notes: tuple = ()
    axis: str = "pulse"
    """What the places of the drift count."""

    def to_dict(self):
        """Return the calibration as plain data for JSON."""
        return {
            "schema": SCHEMA,
            "pulses": len(self.rows), "used": sum(row.used for row in self.rows),
            "converged": self.converged, "rounds": self.rounds,
            "scatter": _plain(self.scatter),
            "shared": [_shared(s) for s in self.shared],
            "correlations": {"of": list(self.keys),
                             "matrix": [[round(float(v), 6) for v in row]
                                        for row in self.correlation]},
            "not_separated": [
                {"first": p.first, "second": p.second, "correlation": _plain(p.correlation),
                 "slope": _plain(p.slope), "sigma": _plain(p.sigma)} for p in self.pairs],
            "gain_drift": [_drift(d) for d in self.drifts], "drift_axis": self.axis,
            "held": list(self.held), "notes": list(self.notes),
            "traces": [_row(r) for r in self.rows],
        }


def unit_of(key):
    """Return the unit of a shared unknown's numbers.

    Parameters
    ----------
    key : str
        Key path, or a common error of the model.

    Returns
    -------
    unit : str
        Suffix of ``units.UNITS``; empty for a pure number.
    """
    if key in (BEND, DEPLETION):
        return ""
    table, _, name = split_path(key)
    return KEYS_OF[table][name].unit


def in_unit(key, value):
    """Return a value in the unit of its key.

    Parameters
    ----------
    key : str
        Key path, or a common error of the model.
    value : float
        In SI [SI].

    Returns
    -------
    value : float
        In the key's unit [unit].
    """
    return float(from_si(value, unit_of(key)))


def _shared(one):
    return {
        "key": one.key, "label": one.label, "unit": one.unit,
        "before": {"value": _plain(one.before), "sigma": _plain(one.before_sigma)},
        "sigma_stated": one.stated,
        "after": {"value": _plain(one.after), "sigma": _plain(one.sigma)},
        "moved_sigmas": _plain(one.moved), "sigma_ratio": _plain(one.narrowed),
        "written": one.written, "informed_by": one.informed,
    }


def _drift(one):
    return {
        "key": one.key,
        "change_percent": {"value": 100.0 * one.change, "sigma": 100.0 * one.change_sigma},
        "chi2": one.chi2, "degrees": len(one.names) - 1, "probability": one.probability,
        "pulses": [
            {"trace": name, "place": float(place), "relative_percent":
             {"value": 100.0 * float(value), "sigma": 100.0 * float(sigma)}}
            for name, place, value, sigma in zip(one.names, one.places, one.relative, one.sigma,
                                                 strict=True)],
    }


def _row(row):
    number = None
    if row.number is not None:
        number = {"value": row.number[0] * 1e-6, "sigma": row.number[1] * 1e-6}
    return {
        "trace": row.name, "used": row.used,
        "reasons": [{"code": code, "text": text} for code, text in row.reasons],
        "concentration_per_cm3": number,
        "sigma_at_this_bench": None if row.number_alone is None else row.number_alone * 1e-6,
        "final_radius_um": None if row.final_radius is None else row.final_radius * 1e6,
        "chi2_reduced": _plain(row.chi2_reduced), "disagrees_by_sigmas": _plain(row.excess),
        "weight": _plain(row.weight),
        "unexplained_rms": {column: _plain(value) for column, value in row.left.items()},
    }


def _plain(value):
    if value is None or not np.isfinite(value):
        return None
    return float(value)
