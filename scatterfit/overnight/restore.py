"""A result read back: from the JSON that a ledger keeps to the record that a fit returns."""

from types import MappingProxyType

import numpy as np

from scatterfit.measured_pulse.record import (
    Alternative,
    BudgetLine,
    Concentration,
    Curve,
    Extremum,
    Learnt,
    MeasuredPulse,
    NucleationConditions,
    Quantity,
    Reason,
)
from scatterfit.overnight.thin import channels_from

_MICRO, _MILLI, _PER_CM3, _KILO = 1e-6, 1e-3, 1e6, 1e3


def pulse_from(result, kept=()):
    """Return the record of a stored result.

    Parameters
    ----------
    result : mapping
        As ``MeasuredPulse.to_dict`` gave it.
    kept : sequence of mapping
        Trace and fit with fewer points, as the ledger keeps them.

    Returns
    -------
    pulse : MeasuredPulse
        In SI; its ``to_dict`` gives the same result again, to the last digit or two.

    Examples
    --------
    >>> before = MeasuredPulse("a.csv", "accepted", final_radius=Quantity(1.5e-6, 1e-9))
    >>> pulse_from(before.to_dict()).final_radius
    Quantity(value=1.5e-06, sigma=1e-09)
    """
    return MeasuredPulse(
        trace=result["trace"],
        verdict=result["verdict"],
        reasons=tuple(Reason(r["code"], r["text"]) for r in result["reasons"]),
        final_radius=_quantity(result["final_radius_um"], _MICRO),
        final_time=_times(result["final_ms"], _MILLI),
        growth_rate=_quantity(result["growth_rate_um_per_s"], _MICRO),
        area_rate=_quantity(result["area_rate_um2_per_s"], _MICRO**2),
        growth_scale=_quantity(result["growth_scale"]),
        radius_spread=_quantity(result["radius_spread_percent"], 0.01),
        droplet_temperature=_quantity(result["droplet_temperature_K"]),
        concentration=_concentration(result["concentration_per_cm3"]),
        concentration_by=MappingProxyType({
            handle: _quantity(value, _PER_CM3)
            for handle, value in result["concentration_by"].items()
        }),
        upper_limit=_times(result["upper_limit_per_cm3"], _PER_CM3),
        birth_time=_quantity(result["birth_ms"], _MILLI),
        growth_saturation_ratio=_quantity(result["growth_saturation_ratio"]),
        growth_temperature=_quantity(result["growth_temperature_K"]),
        optical_depth=result["optical_depth"],
        nucleation=_nucleation(result["nucleation"]),
        curve=_curve(result["curve"]),
        extrema=tuple(
            Extremum(e["time_ms"] * _MILLI, e["radius_um"] * _MICRO, e["kind"], e["column"])
            for e in result["extrema"]
        ),
        alternatives=tuple(
            Alternative(a["final_radius_um"] * _MICRO,
                        _times(a["concentration_per_cm3"], _PER_CM3), _number(a["delta_chi2"]))
            for a in result["alternatives"]
        ),
        chi2_reduced=result["chi2_reduced"],
        residual_lag1=result["residual_lag1"],
        budget=tuple(
            BudgetLine(b["input"], b["quantity"], _number(b["sigma"]), _number(b["share"]))
            for b in result["budget"]
        ),
        learnt=tuple(
            Learnt(line["input"], _number(line["moved_sigmas"]), _number(line["sigma_left"]))
            for line in result.get("learnt", ())
        ),
        **_monte_carlo(result.get("monte_carlo")),
        provenance=result["provenance"],
        channels=channels_from(kept),
    )


def _quantity(stored, factor=1.0):
    if stored is None:
        return None
    return Quantity(stored["value"] * factor, stored["sigma"] * factor)


def _concentration(stored):
    if stored is None:
        return None
    parts = (_number(_times(stored[f"sigma_{part}"], _PER_CM3))
             for part in ("statistical", "systematic"))
    return Concentration(stored["value"] * _PER_CM3, stored["sigma"] * _PER_CM3, *parts)


def _nucleation(stored):
    return NucleationConditions(
        temperature=_quantity(stored["temperature_K"]),
        pressure=_quantity(stored["pressure_kPa"], _KILO),
        saturation_ratio=_quantity(stored["saturation_ratio"]),
        effective=_quantity(stored["effective_ms"], _MILLI),
        rate=_quantity(stored["rate_per_cm3_s"], _PER_CM3),
        temperature_saturation_covariance=stored.get("temperature_saturation_covariance_K"),
    )


def _monte_carlo(stored):
    if stored is None:
        return {}
    return {"trials": stored["trials"], "monte_carlo": {
        "final_radius": _quantity(stored["final_radius_um"], _MICRO),
        "concentration": _quantity(stored["concentration_per_cm3"], _PER_CM3),
        "nucleation_rate": _quantity(stored["nucleation_rate_per_cm3_s"], _PER_CM3),
    }}


def _curve(stored):
    if not stored["time_ms"]:
        return None
    return Curve(
        np.array(stored["time_ms"]) * _MILLI,
        np.array(stored["radius_um"]) * _MICRO,
        np.array(stored["sigma_um"], dtype=float) * _MICRO,
    )


def _times(value, factor):
    return None if value is None else value * factor


def _number(value):
    return float("nan") if value is None else value
