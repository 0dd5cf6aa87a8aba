"""Where a bench's light curve has its maxima and minima, as plain text."""

import textwrap

from scatterfit.cloud_optics.extrema import kernel_extrema
from scatterfit.report.bench import WIDTH
from scatterfit.report.rounding import format_number

SPREAD = 0.01
"""Relative spread of radii for which the lobes are shown [-]."""

RESOLVED = 0.1
"""Difference of ln(signal) between neighbours that a lobe must have to be told from noise and
drift [-]; common practice, no source."""

_SMALLEST = 0.1e-6
_SHOWN = 14


def lobes_section(bench, table):
    """Return the radii at which each channel has a maximum, a minimum or a shoulder.

    Parameters
    ----------
    bench : Apparatus
        The bench.
    table : BenchTable
        Its cross sections at the spread of radii to show.

    Returns
    -------
    text : str
        A titled list; for each channel the largest radius that its lobes resolve.
    """
    head = f"Lobes of a cloud with {100 * SPREAD:g} percent spread of radii [µm]"
    parts = [head]
    for detector, row in zip(bench.detectors, table.collected, strict=True):
        parts += _channel(bench, table, detector.column, row)
    if bench.transmission is not None:
        name = bench.transmission.column
        parts += _channel(bench, table, name, table.lost)
    return "\n".join(parts)


def _channel(bench, table, name, row):
    largest = bench.analysis.max_radius
    found = kernel_extrema(table, row, radius_range=(_SMALLEST, largest), least_depth=0.05)
    lines = [f"  {name}"]
    for kind, plural in (("maximum", "maxima"), ("minimum", "minima"), ("shoulder", "shoulders")):
        radii = [f"{1e6 * one.radius:.3f}" for one in found if one.kind == kind]
        if radii:
            more = f" ... ({len(radii)} in all)" if len(radii) > _SHOWN else ""
            text = ", ".join(radii[:_SHOWN]) + more
            indent = f"    {plural:<11}"
            lines += textwrap.wrap(text, WIDTH, initial_indent=indent, subsequent_indent=15 * " ")
    lines.append(f"    {_resolved(found, largest)}")
    return lines


def _resolved(found, largest):
    """Return in words up to which radius the lobes stand out."""
    lobes = [one for one in found if one.kind != "shoulder"]
    clear = [one for one in lobes if one.prominence >= RESOLVED]
    share = f"lobes of {100 * RESOLVED:g} percent"
    if not clear:
        return f"no {share}: shoulders and amplitude alone tell the radius"
    if len(clear) == len(lobes):
        return f"{share} up to the largest radius considered, {format_number(1e6 * largest, 'um')}"
    return f"{share} up to {format_number(1e6 * clear[-1].radius, 'um', 3)}"
