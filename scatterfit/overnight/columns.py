"""The flat columns of a pulse: what the ledger's table and every export have, with their units."""

from dataclasses import dataclass


@dataclass(frozen=True)
class Column:
    """One column of the table of pulses."""

    name: str
    """As it heads the column; ends in its unit."""
    unit: str
    """In the spelling of UDUNITS; ``1`` for a pure number, empty for text."""
    meaning: str
    """In a few words."""
    path: tuple[str, ...]
    """Where the number stands in a result."""
    has_sigma: bool = True
    """Whether a column ``NAME_sigma`` with the standard uncertainty stands beside it."""


_BY = "droplets per volume at the undisturbed growth state, by {} alone"

COLUMNS = (
    Column("final_radius_um", "um", "radius of the median-age droplet at the last fitted sample",
           ("final_radius_um",)),
    Column("final_ms", "ms", "time of the last fitted sample", ("final_ms",), has_sigma=False),
    Column("growth_rate_um_per_s", "um s-1", "dr/dt at the reference radius",
           ("growth_rate_um_per_s",)),
    Column("area_rate_um2_per_s", "um2 s-1", "d(r2)/dt at the reference radius",
           ("area_rate_um2_per_s",)),
    Column("growth_scale", "1", "measured growth rate over the computed one", ("growth_scale",)),
    Column("radius_spread_percent", "percent", "relative spread of radii in the cloud",
           ("radius_spread_percent",)),
    Column("droplet_temperature_K", "K", "droplet temperature at the reference radius",
           ("droplet_temperature_K",)),
    Column("concentration_per_cm3", "cm-3", "droplets per volume at the undisturbed growth state",
           ("concentration_per_cm3",)),
    *(Column(f"concentration_by_{handle}_per_cm3", "cm-3", _BY.format(handle),
             ("concentration_by", handle))
      for handle in ("gain", "transmission", "depletion")),
    Column("upper_limit_per_cm3", "cm-3", "95 percent upper limit where no cloud is seen",
           ("upper_limit_per_cm3",), has_sigma=False),
    Column("birth_ms", "ms", "median birth of the droplets", ("birth_ms",)),
    Column("growth_saturation_ratio", "1", "undisturbed saturation ratio during growth",
           ("growth_saturation_ratio",)),
    Column("growth_temperature_K", "K", "undisturbed gas temperature during growth",
           ("growth_temperature_K",)),
    Column("optical_depth", "1", "optical depth of the cloud at the end", ("optical_depth",),
           has_sigma=False),
    Column("nucleation_temperature_K", "K", "gas temperature at the peak of the hold",
           ("nucleation", "temperature_K")),
    Column("nucleation_pressure_kPa", "kPa", "gas pressure at the peak of the hold",
           ("nucleation", "pressure_kPa")),
    Column("nucleation_saturation_ratio", "1", "saturation ratio over the liquid at the peak of "
           "the hold", ("nucleation", "saturation_ratio")),
    Column("nucleation_effective_ms", "ms", "effective duration of the hold",
           ("nucleation", "effective_ms")),
    Column("nucleation_rate_per_cm3_s", "cm-3 s-1", "peak nucleation rate",
           ("nucleation", "rate_per_cm3_s")),
    Column("nucleation_temperature_saturation_covariance_K", "K",
           "covariance of temperature and saturation ratio at the peak of the hold",
           ("nucleation", "temperature_saturation_covariance_K"), has_sigma=False),
    Column("chi2_reduced", "1", "noise-weighted misfit", ("chi2_reduced",), has_sigma=False),
    Column("residual_lag1", "1", "correlation of neighbouring residuals", ("residual_lag1",),
           has_sigma=False),
    Column("seed_concentration_per_cm3", "cm-3", "seeds per volume at the chamber's state",
           ("seed", "concentration_per_cm3")),
    Column("seed_diameter_nm", "nm", "diameter of the seeds", ("seed", "diameter_nm")),
    Column("background_concentration_per_cm3", "cm-3", "larger particles per volume at the "
           "chamber's state", ("background", "concentration_per_cm3")),
    Column("background_diameter_nm", "nm", "their diameter", ("background", "diameter_nm")),
    Column("background_detected_diameter_nm", "nm", "diameter from which on droplets are no longer "
           "swept up", ("background", "detected_diameter_nm")),
    Column("start_temperature_K", "K", "before the expansion, as stated",
           ("chamber", "temperature_K")),
    Column("start_pressure_kPa", "kPa", "before the expansion, as stated",
           ("chamber", "pressure_kPa")),
)
"""Every number that the table has of a pulse, in its order."""

_PARTS_OF_SIGMA = ("sigma_statistical", "sigma_systematic")


def _with_sigmas(column):
    yield column.name, column.unit, column.meaning
    if not column.has_sigma:
        return
    yield f"{column.name}_sigma", column.unit, f"standard uncertainty of {column.name}"
    if column.name == "concentration_per_cm3":
        for part in _PARTS_OF_SIGMA:
            kind = part.removeprefix("sigma_")
            yield (f"{column.name}_{part}", column.unit,
                   f"{kind} part of the standard uncertainty of {column.name}")


NUMBERS = {name: (unit, meaning) for column in COLUMNS for name, unit, meaning
           in _with_sigmas(column)}
"""Column of numbers to its unit and meaning, uncertainties included, in the table's order."""

TEXTS = {
    "trace": "path of the trace from the folder",
    "verdict": "accepted, ambiguous, rejected or failed",
    "reasons": "codes of the reasons, joined by semicolons",
}
"""Column of text to its meaning."""

RECORD = {
    "recorded_utc": "when the trace's file was last changed",
    "fitted_utc": "when the result was stored",
    "trace_sha256": "hash of the trace's bytes",
    "chamber_sha256": "hash of the chamber file's bytes",
    "version": "of scatterfit",
}
"""Column of text that says where a row comes from to its meaning."""

KEPT_BY_HAND = {
    "excluded": "1 where a person has excluded the pulse, else 0",
    "excluded_by": "who excluded it",
    "excluded_note": "why",
}
"""Columns that say whether a pulse was excluded by hand."""


STATED = ("seed", "background", "chamber")
"""Tables of the chamber file that the columns show as they are stated."""


def flat_row(result, stated=None):
    """Return the flat columns of one result.

    Parameters
    ----------
    result : mapping
        A result as ``MeasuredPulse.to_dict`` gives it.
    stated : mapping, optional
        The chamber file's tables of `STATED` with this pulse's overrides.

    Returns
    -------
    row : dict
        Column name to number, text or ``None``; every column of `TEXTS` and `NUMBERS`.

    Examples
    --------
    >>> from scatterfit.measured_pulse.record import MeasuredPulse, Quantity
    >>> pulse = MeasuredPulse("a.csv", "accepted", final_radius=Quantity(1.5e-6, 1e-9))
    >>> row = flat_row(pulse.to_dict(), {"seed": {"diameter_nm": 80.0}})
    >>> row["final_radius_um"], row["final_radius_um_sigma"], row["seed_diameter_nm"]
    (1.5, 0.001, 80.0)
    """
    row = {
        "trace": result["trace"],
        "verdict": result["verdict"],
        "reasons": ";".join(dict.fromkeys(reason["code"] for reason in result["reasons"])),
    }
    tree = {**result, **{table: _quantities(keys) for table, keys in (stated or {}).items()}}
    for column in COLUMNS:
        row.update(_cells(column, _found(tree, column.path)))
    return row


def _quantities(keys):
    return {name: {"value": value, "sigma": keys.get(f"{name}_sigma")}
            for name, value in keys.items() if not name.endswith("_sigma")}


def _found(tree, path):
    for name in path:
        tree = (tree or {}).get(name)
    return tree


def _cells(column, value):
    """Return the column's number and, where it has them, its uncertainties."""
    if not column.has_sigma:
        return {column.name: value}
    value = value or {}
    cells = {column.name: value.get("value"), f"{column.name}_sigma": value.get("sigma")}
    if column.name == "concentration_per_cm3":
        cells |= {f"{column.name}_{part}": value.get(part) for part in _PARTS_OF_SIGMA}
    return cells
