"""What a bench implies, as plain text: state of the gas, properties with their sources."""

import math
import textwrap

from scatterfit import matter
from scatterfit.droplet_growth.walls import adiabatic_lifetime, wall_heat
from scatterfit.report.rounding import NOT_DETERMINED, format_number, format_quantity

WIDTH = 80
"""Columns of the text."""

_LABEL = 28
_POLARIZATIONS = {None: "unpolarized", 0.0: "polarized parallel",
                  math.pi / 2: "polarized perpendicular"}
_LIQUID = (("saturation_pressure", "Pa"), ("latent_heat", "J/mol"), ("density", "kg/m3"),
           ("surface_tension", "N/m"), ("vapour_heat_capacity", "J/(mol K)"))
_GAS = (("heat_capacity", "J/(mol K)"), ("conductivity", "W/(m K)"))


def light_section(bench):
    """Return what light is measured, where.

    Parameters
    ----------
    bench : Apparatus
        The bench.

    Returns
    -------
    text : str
        A titled table.
    """
    rows = [_beam(bench, beam) for beam in bench.beams]
    rows += [(f"detector {d.column}", _whose(bench, d) + _detector(d)) for d in bench.detectors]
    if bench.transmission is not None:
        rows.append((f"transmission {bench.transmission.column}",
                     _whose(bench, bench.transmission)
                     + f"path {1e3 * bench.transmission.path:g} mm"))
    rows.append(("path to a detector", f"{1e3 * bench.chamber.path:g} mm of cloud, in and out"))
    return table("Light", rows)


def _beam(bench, beam):
    """Return the row of one laser beam."""
    angle = _POLARIZATIONS.get(beam.polarization)
    if angle is None:
        angle = f"polarized {math.degrees(beam.polarization):g} degrees from the plane"
    label = f"laser {beam.name}" if bench.other_beams else "laser"
    return label, f"{1e9 * beam.wavelength:g} nm in vacuum, {angle}"


def _whose(bench, record):
    """Return the start of a text that says which of several beams a channel sees."""
    return f"{record.beam}, " if bench.other_beams else ""


def _detector(detector):
    cone = f"{math.degrees(detector.angle):g} ± {math.degrees(detector.half_angle):g} degrees"
    if detector.gain is None:
        return f"{cone} (cone), no gain"
    return f"{cone} (cone), gain {format_number(detector.gain, 'V m')}"


def start_section(bench, fraction, pressure, saturation):
    """Return the state of the vapour before the expansion.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    fraction : float or None
        Mole fraction of vapour [-].
    pressure : float or None
        Of the chamber [Pa]; ``None`` where only a trace would tell.
    saturation : float or None
        Saturation ratio over the liquid [-].

    Returns
    -------
    text : str
        A titled table.
    """
    sigmas, chamber = bench.sigmas, bench.chamber
    gas = ", ".join(f"{name} {share:g}" for name, share in bench.carrier.items())
    stated = pressure == chamber.pressure
    rows = [
        ("carrier (dry)", gas),
        ("vapour", bench.vapour.substance),
        ("temperature", _with_sigma(chamber.temperature, sigmas.get("chamber.temperature_K"), "K")),
        ("pressure", NOT_DETERMINED if pressure is None else _with_sigma(
            pressure / 1e3,
            _scaled(sigmas.get("chamber.pressure_kPa") if stated else None, 1e-3), "kPa")),
        ("vapour, mole fraction", format_number(fraction)),
        ("vapour, partial pressure",
         NOT_DETERMINED if None in {fraction, pressure} else
         format_number(fraction * pressure / 1e3, "kPa")),
        ("saturation ratio", format_number(saturation)),
    ]
    return table("Before the expansion", rows)


def after_section(setup):
    """Return the states during the nucleation hold and during growth.

    Parameters
    ----------
    setup : GrowthSetup
        Of a pulse, or of the stated states.

    Returns
    -------
    text : str
        Two titled tables.
    """
    path, hold = setup.path, setup.hold
    growth = [
        ("temperature", format_number(path.reference_temperature, "K", 5)),
        ("pressure", format_number(path.reference_pressure / 1e3, "kPa")),
        ("saturation ratio", format_number(setup.growth_saturation_ratio)),
    ]
    parts = [table("During growth (undisturbed gas)", growth + _walls(setup))]
    if hold is None:
        return "\n\n".join(["Nucleation hold: not stated", *parts])
    lasting = None if hold.effective is None else 1e3 * hold.effective
    rows = [
        ("temperature", format_number(hold.temperature, "K", 5)),
        ("pressure", format_number(hold.pressure / 1e3, "kPa")),
        ("saturation ratio", format_number(hold.saturation_ratio)),
        ("effective duration", format_number(lasting, "ms")),
    ]
    if setup.threshold is None:
        rate = math.exp(min(hold.log_rate, 700.0)) / 1e6
        rows.append(("classical nucleation rate", format_number(rate, "1/(cm3 s)", 2)))
        title = "Nucleation hold (at its peak)"
    else:
        rows.append(("seeds' threshold", f"saturation ratio {format_number(setup.threshold)}"))
        title = "Peak of the saturation ratio (seeds: no nucleation)"
    return "\n\n".join([table(title, rows), *parts])


def _walls(setup):
    """Return rows about heat from the walls."""
    heat = wall_heat(setup)
    age = float(setup.path.time[-1] - setup.births.times[0])
    after = f"after {1e3 * age:.3g} ms"
    rows = [("thermal diffusivity", format_number(1e6 * heat.diffusivity, "mm2/s", 3)),
            ("warm layer at the walls", f"{format_number(1e3 * heat.layer(age), 'mm', 2)} {after}")]
    if heat.width is None:
        return [*rows, ("adiabatic lifetime", "state chamber.width_mm to know it")]
    lifetime = adiabatic_lifetime(heat.diffusivity, heat.width)
    return [
        *rows,
        ("adiabatic lifetime", f"{format_number(lifetime, 's', 2)} in the middle of "
                               f"{1e3 * heat.width:g} mm"),
        ("core warmed, if closed", f"{format_number(heat.core_warming(age), 'K', 2)} {after}, at "
                                   f"least"),
    ]


def properties_section(bench, temperatures):
    """Return the properties used, with their values, ranges and sources.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    temperatures : tuple of float
        Lowest and highest temperature that the pulse reaches; values are given at the mean [K].

    Returns
    -------
    text : str
        Two lines a property; those used outside their range are marked.
    """
    substance = matter.substance(bench.vapour.substance).with_overrides(bench.vapour.overrides)
    gas = matter.carrier(bench.carrier)
    middle = sum(temperatures) / len(temperatures)
    lines = [f"Properties at {middle:.1f} K, from {min(temperatures):.1f} to "
             f"{max(temperatures):.1f} K"]
    for name, unit in _LIQUID:
        lines += _property(getattr(substance, name), name, unit, temperatures)
    diffusivity = matter.diffusivity(substance, gas)
    lines += _property(diffusivity, "diffusivity at 101.325 kPa", "m2/s", temperatures)
    for name, unit in _GAS:
        lines += _property(getattr(gas, name), f"carrier {name}", unit, temperatures)
    lines += _index(bench, substance, temperatures)
    return "\n".join(lines)


def _property(quantity, name, unit, temperatures):
    middle = sum(temperatures) / len(temperatures)
    value = format_number(float(quantity(middle)), unit)
    percent = f"± {100 * quantity.relative_uncertainty:.2g} %"
    outside = quantity.outside(temperatures)
    return _sourced(name.replace("_", " "), value, percent, outside, quantity)


def _index(bench, substance, temperatures):
    index = substance.refractive_index
    middle = sum(temperatures) / len(temperatures)
    lines = []
    for beam in bench.beams:
        name = f"refractive index, {beam.name}" if bench.other_beams else "refractive index"
        stated = bench.vapour.refractive_index or beam.refractive_index
        if stated is not None:
            value = f"{stated.real:g}" + (f" + {stated.imag:g} i" if stated.imag else "")
            lines += _lines(name, f"{value:<22}", "chamber file")
            continue
        value = f"{float(index(beam.wavelength, middle).real):.5g}"
        outside = index.outside(beam.wavelength, temperatures)
        lines += _sourced(name, value, f"± {index.uncertainty:.1g}", outside, index)
    return lines


def _sourced(name, value, spread, outside, quantity):
    low, high = quantity.range
    known = "any temperature" if high == math.inf else f"{low:g} to {high:g} K"
    mark = "used outside its range; " if outside else ""
    return _lines(name, f"{value:<22}{spread:<10}{known}", mark + quantity.source)


def _lines(name, text, source):
    head = f"  {name:<{_LABEL}}{text}".rstrip()
    indent = "      "
    return [head, *textwrap.wrap(source, WIDTH, initial_indent=indent, subsequent_indent=indent)]


def table(title, rows):
    """Return a titled table of two columns.

    Parameters
    ----------
    title : str
        Its title.
    rows : sequence of pairs of str
        Label and text of each row.

    Returns
    -------
    text : str
        Lines, without a closing newline.

    Examples
    --------
    >>> print(table("Gas", [("temperature", "270 K")]))
    Gas
      temperature                 270 K
    """
    return "\n".join([title, *(f"  {label:<{_LABEL}}{text}" for label, text in rows)])


def _with_sigma(value, sigma, unit):
    return format_number(value, unit, 5) if sigma is None else format_quantity(value, sigma, unit)


def _scaled(value, factor):
    return None if value is None else value * factor
