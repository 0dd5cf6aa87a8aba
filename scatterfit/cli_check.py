"""What the bench implies, and how a trace was understood."""

from scatterfit import matter
from scatterfit.apparatus.check import apparatus_from_mapping, apply_overrides
from scatterfit.apparatus.saturation import saturation_before
from scatterfit.cloud_optics.beams import beam_indices, build_bench_kernel
from scatterfit.constants import STANDARD_PRESSURE
from scatterfit.droplet_growth.setup import growth_setup
from scatterfit.files import load_pulse, parse_assignment, read_chamber_mapping
from scatterfit.files_kernel import default_store
from scatterfit.report.bench import (
    after_section,
    light_section,
    properties_section,
    start_section,
)
from scatterfit.report.lobes import SPREAD, lobes_section
from scatterfit.report.recording import recording_section


def check_text(chamber, trace=None, settings=()):
    """Return what a bench implies and how a trace was understood.

    Parameters
    ----------
    chamber : path-like
        Chamber file.
    trace : path-like, optional
        A trace.
    settings : sequence of str
        ``KEY=VALUE`` of values to replace.

    Returns
    -------
    text : str
        Sections separated by blank lines.
    """
    overrides = dict(parse_assignment(setting) for setting in settings)
    record, used = None, overrides
    if trace is None:
        mapping = apply_overrides(read_chamber_mapping(chamber), overrides, "--set")
        bench = apparatus_from_mapping(mapping, str(chamber))
    else:
        bench, record, used = load_pulse(chamber, trace, overrides)
    setup = _setup(bench, record)
    parts = [f"Bench {chamber}", light_section(bench), _start(bench, setup)]
    if setup is None:
        parts.append("After the expansion: a trace with the pressure tells; "
                     f"scatterfit check {chamber} TRACE")
    else:
        parts.append(after_section(setup))
    parts.append(lobes_section(bench, _kernel_table(bench, setup)))
    parts.append(properties_section(bench, _temperatures(bench, setup)))
    if record is not None:
        parts.append(recording_section(bench, record, used))
    return "\n\n".join(parts)


def _setup(bench, record):
    """Return the states of the gas where the bench or a trace tells them."""
    if bench.pressure is None:
        return growth_setup(bench)
    if record is None:
        return None
    return growth_setup(bench, record.time, record.columns[bench.pressure.column])


def _kernel_table(bench, setup):
    """Return the bench's cross sections at the state of growth, or before the expansion."""
    temperature, pressure = bench.chamber.temperature, bench.chamber.pressure
    if setup is not None:
        temperature = setup.path.reference_temperature
        pressure = setup.path.reference_pressure
    state = temperature, pressure or STANDARD_PRESSURE, temperature
    gas, liquid = beam_indices(
        bench, matter.carrier(bench.carrier), matter.substance(bench.vapour.substance), state)
    kernel = build_bench_kernel(bench, gas, liquid / gas, default_store())
    return kernel.at(liquid / gas, spread=SPREAD)


def _start(bench, setup):
    pressure = bench.chamber.pressure if setup is None else setup.start_pressure
    fraction = bench.vapour.mole_fraction if setup is None else setup.vapour_fraction
    saturation = None if pressure is None else saturation_before(bench, pressure)
    return start_section(bench, fraction, pressure, saturation)


def _temperatures(bench, setup):
    """Return the lowest and highest temperature that the gas reaches [K]."""
    start = bench.chamber.temperature
    if setup is None:
        return start, start
    low = setup.path.reference_temperature
    return (low if setup.hold is None else min(low, setup.hold.temperature)), start
