"""One pulse's result: numbers with uncertainties, or none with a reason."""

import math
from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

SCHEMA = "scatterfit-pulse-1"
_MICRO, _MILLI, _PER_CM3, _KILO = 1e6, 1e3, 1e-6, 1e-3


@dataclass(frozen=True)
class Quantity:
    """A value with its standard uncertainty, in SI."""

    value: float
    sigma: float

    def to_dict(self, factor=1.0):
        """Return value and sigma in another unit, or ``None`` if either is not finite.

        Examples
        --------
        >>> Quantity(1.5e-6, 1e-9).to_dict(1e6)
        {'value': 1.5, 'sigma': 0.001}
        """
        value, sigma = float(self.value) * factor, float(self.sigma) * abs(factor)
        if not (math.isfinite(value) and math.isfinite(sigma)):
            return None
        return {"value": value, "sigma": sigma}


@dataclass(frozen=True)
class Concentration(Quantity):
    """A number density with its uncertainty by origin [1/m^3]."""

    sigma_statistical: float = math.nan
    sigma_systematic: float = math.nan

    def to_dict(self, factor=1.0):
        """Return the value and its three sigmas in another unit."""
        base = super().to_dict(factor)
        if base is None:
            return None
        return {
            **base,
            "sigma_statistical": _finite(self.sigma_statistical * factor),
            "sigma_systematic": _finite(self.sigma_systematic * factor),
        }


@dataclass(frozen=True)
class Reason:
    """Why a verdict is what it is, and what would help."""

    code: str
    text: str


@dataclass(frozen=True)
class Extremum:
    """A peak, trough or shoulder of a channel, found in the trace without the fit."""

    time: float
    """[s]."""
    radius: float
    """Of the kernel's extremum that it matches [m]."""
    kind: str
    """``"maximum"``, ``"minimum"`` or ``"shoulder"``."""
    column: str


@dataclass(frozen=True)
class Alternative:
    """Another cloud that describes the trace nearly as well."""

    final_radius: float
    """[m]."""
    number_density: float | None
    """[1/m^3]."""
    delta_chi2: float
    """Misfit beyond that of the best cloud [-]."""


@dataclass(frozen=True)
class Curve:
    """Radius of the median-age droplet against time."""

    time: np.ndarray
    """Shape (n,) [s]."""
    radius: np.ndarray
    """Shape (n,) [m]."""
    sigma: np.ndarray
    """Standard uncertainty, shape (n,) [m]."""


@dataclass(frozen=True)
class NucleationConditions:
    """The state in which droplets were born."""

    temperature: Quantity | None = None
    """[K]."""
    pressure: Quantity | None = None
    """[Pa]."""
    saturation_ratio: Quantity | None = None
    """Over the liquid [-]."""
    effective: Quantity | None = None
    """Effective duration of the hold [s]."""
    rate: Quantity | None = None
    """Peak nucleation rate [1/(m^3 s)]."""
    temperature_saturation_covariance: float | None = None
    """Covariance of temperature and saturation ratio [K]."""


@dataclass(frozen=True)
class BudgetLine:
    """One input's part in one result's uncertainty."""

    input: str
    quantity: str
    sigma: float
    """Standard uncertainty it causes, in the unit of the quantity's key."""
    share: float
    """Of the variance [-]."""


@dataclass(frozen=True)
class Learnt:
    """What the trace says about an input that was stated with a standard uncertainty."""

    input: str
    moved: float
    """How far from the stated value, in stated sigmas [-]."""
    left: float
    """Sigma afterwards over the stated sigma [-]."""


@dataclass(frozen=True)
class ChannelView:
    """A channel as measured and as fitted, for figures."""

    column: str
    label: str
    time: np.ndarray
    """Shape (n,) [s]."""
    signal: np.ndarray
    """As measured, shape (n,) [V]."""
    fit: np.ndarray
    """Shape (n,) [V]; not a number where there is no fit."""
    residual: np.ndarray
    """In units of the noise, shape (n,) [-]."""
    used: np.ndarray
    """Whether the sample was fitted, shape (n,) [bool]."""


@dataclass(frozen=True)
class MeasuredPulse:
    """All that was learnt from one pulse, in SI; ``None`` where the data do not say."""

    trace: str
    verdict: str
    reasons: tuple[Reason, ...] = ()
    final_radius: Quantity | None = None
    final_time: float | None = None
    growth_rate: Quantity | None = None
    area_rate: Quantity | None = None
    growth_scale: Quantity | None = None
    radius_spread: Quantity | None = None
    droplet_temperature: Quantity | None = None
    concentration: Concentration | None = None
    concentration_by: Mapping[str, Quantity | None] = field(
        default_factory=lambda: {"gain": None, "transmission": None, "depletion": None}
    )
    upper_limit: float | None = None
    birth_time: Quantity | None = None
    growth_saturation_ratio: Quantity | None = None
    growth_temperature: Quantity | None = None
    optical_depth: float | None = None
    nucleation: NucleationConditions = field(default_factory=NucleationConditions)
    curve: Curve | None = None
    extrema: tuple[Extremum, ...] = ()
    alternatives: tuple[Alternative, ...] = ()
    chi2_reduced: float | None = None
    residual_lag1: float | None = None
    budget: tuple[BudgetLine, ...] = ()
    learnt: tuple[Learnt, ...] = ()
    monte_carlo: Mapping[str, Quantity] | None = None
    """Spread over repeated analyses, where they were asked for."""
    trials: int = 0
    """How many repeated analyses there were."""
    provenance: Mapping[str, object] = field(default_factory=dict)
    channels: tuple[ChannelView, ...] = ()

    def to_dict(self):
        """Return the result as the documented JSON object, in the units its keys name."""
        return {
            "schema": SCHEMA,
            "trace": self.trace,
            "verdict": self.verdict,
            "reasons": [{"code": r.code, "text": r.text} for r in self.reasons],
            "final_radius_um": _as(self.final_radius, _MICRO),
            "final_ms": _plain(self.final_time, _MILLI),
            "growth_rate_um_per_s": _as(self.growth_rate, _MICRO),
            "area_rate_um2_per_s": _as(self.area_rate, _MICRO**2),
            "growth_scale": _as(self.growth_scale),
            "radius_spread_percent": _as(self.radius_spread, 100.0),
            "droplet_temperature_K": _as(self.droplet_temperature),
            "concentration_per_cm3": _as(self.concentration, _PER_CM3),
            "concentration_by": {
                key: _as(self.concentration_by.get(key), _PER_CM3)
                for key in ("gain", "transmission", "depletion")
            },
            "upper_limit_per_cm3": _plain(self.upper_limit, _PER_CM3),
            "birth_ms": _as(self.birth_time, _MILLI),
            "growth_saturation_ratio": _as(self.growth_saturation_ratio),
            "growth_temperature_K": _as(self.growth_temperature),
            "optical_depth": _plain(self.optical_depth),
            "nucleation": self._nucleation(),
            "curve": self._curve(),
            "extrema": [
                {"time_ms": e.time * _MILLI, "radius_um": e.radius * _MICRO,
                 "kind": e.kind, "column": e.column}
                for e in self.extrema
            ],
            "alternatives": [
                {"final_radius_um": a.final_radius * _MICRO,
                 "concentration_per_cm3": _plain(a.number_density, _PER_CM3),
                 "delta_chi2": _finite(a.delta_chi2)}
                for a in self.alternatives
            ],
            "chi2_reduced": _plain(self.chi2_reduced),
            "residual_lag1": _plain(self.residual_lag1),
            "budget": [
                {"input": line.input, "quantity": line.quantity,
                 "sigma": _finite(line.sigma), "share": _finite(line.share)}
                for line in self.budget
            ],
            "learnt": [
                {"input": line.input, "moved_sigmas": _finite(line.moved),
                 "sigma_left": _finite(line.left)}
                for line in self.learnt
            ],
            "monte_carlo": self._monte_carlo(),
            "provenance": dict(self.provenance),
        }

    def _nucleation(self):
        n = self.nucleation
        return {
            "temperature_K": _as(n.temperature),
            "pressure_kPa": _as(n.pressure, _KILO),
            "saturation_ratio": _as(n.saturation_ratio),
            "effective_ms": _as(n.effective, _MILLI),
            "rate_per_cm3_s": _as(n.rate, _PER_CM3),
            "temperature_saturation_covariance_K": _plain(n.temperature_saturation_covariance),
        }

    def _monte_carlo(self):
        if self.monte_carlo is None:
            return None
        found = self.monte_carlo
        return {
            "trials": self.trials,
            "final_radius_um": _as(found.get("final_radius"), _MICRO),
            "concentration_per_cm3": _as(found.get("concentration"), _PER_CM3),
            "nucleation_rate_per_cm3_s": _as(found.get("nucleation_rate"), _PER_CM3),
        }

    def _curve(self):
        if self.curve is None:
            return {"time_ms": [], "radius_um": [], "sigma_um": []}
        return {
            "time_ms": [float(v) for v in self.curve.time * _MILLI],
            "radius_um": [float(v) for v in self.curve.radius * _MICRO],
            "sigma_um": [float(v) for v in self.curve.sigma * _MICRO],
        }


def _as(quantity, factor=1.0):
    return None if quantity is None else quantity.to_dict(factor)


def _plain(value, factor=1.0):
    return None if value is None else _finite(value * factor)


def _finite(value):
    """Return a float, or ``None`` where it is not a number that JSON can hold."""
    value = float(value)
    return value if math.isfinite(value) else None
