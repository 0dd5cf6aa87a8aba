"""From a bench and a trace to a problem that can be fitted."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np

from scatterfit.apparatus.records import Apparatus
from scatterfit.apparatus.restated import value_in, with_value
from scatterfit.cloud_optics.beams import BenchKernel, beam_indices, build_bench_kernel
from scatterfit.droplet_growth.setup import GrowthSetup, growth_setup
from scatterfit.errors import TraceError
from scatterfit.forward.light import cloud_light
from scatterfit.forward.model import Channel, PulseModel
from scatterfit.inversion.data import channel_data
from scatterfit.inversion.noise import resolution_step
from scatterfit.measured_pulse.window import FEWEST, span, window_of

_PRESSURES = (1e3, 5e6)
"""Before an expansion, where gases are ideal and laws of growth hold [Pa] (common practice)."""
_APART = 3.0
ANGLE_SIGMAS = 3.0
"""How many of its sigmas a detector's angle may be off [-]."""
LARGEST_ANGLE = np.radians(1.6)
"""How far a detector's angle may be off at the most [rad]."""
_CONES = ("polarization", "half_angle_deg")
_LEAST_SIZE = 0.25
_STRIDE = 2
INDEX_STEP = 2e-4
"""By how much the index of the second model is higher [-]."""


@dataclass(frozen=True)
class Prepared:
    """A pulse ready for the fit."""

    setup: GrowthSetup
    model: PulseModel
    index_model: PulseModel
    """The model with the liquid's index a little higher, for derivatives."""
    kernel: BenchKernel
    """The bench's."""
    relative_index: np.ndarray
    """Of the liquid against the gas in each beam, complex, shape (n_beams,) [-]."""
    index: np.ndarray
    """Of the liquid at the droplets' typical temperature, real part, shape (n_beams,) [-]."""
    time: np.ndarray
    """Every sample, shape (n,) [s]."""
    channels: tuple
    """ChannelData of the optical columns."""
    window: np.ndarray
    """Samples that may be fitted, shape (n,) [bool]."""
    angles: tuple[float, ...] = ()
    """Shift of each detector's angle that the models hold [rad]."""
    varied: tuple[tuple[str, BenchKernel], ...] = ()
    """Key path and kernel with its value moved by its standard uncertainty, where one is stated
    of what tables rest on."""
    restate: Callable[[Apparatus], GrowthSetup] | None = None
    """Gives the setup of the same record on another bench."""

    def modelled(self, kernel):
        """Return the forward model with another kernel of the same beams.

        Parameters
        ----------
        kernel : BenchKernel
            The kernel.
        """
        return pulse_model(self.setup, kernel, self.relative_index, self.angles)


def optical_columns(apparatus):
    """Return the optical columns of a bench and what they are.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.

    Returns
    -------
    columns : list of tuple
        Column name, ``"scatter"`` or ``"transmission"``, and its record.
    """
    columns = [(d.column, "scatter", d) for d in apparatus.detectors]
    if apparatus.transmission is not None:
        columns.append((apparatus.transmission.column, "transmission", apparatus.transmission))
    return columns


def prepare_setup(apparatus, time, columns):
    """Return the growth setup of a pulse.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,)
        Samples [s].
    columns : dict of str to ndarray
        Trace columns, volts and pascal.

    Returns
    -------
    setup : GrowthSetup
        Gas path, births, properties.

    Raises
    ------
    TraceError
        If the gauge shows a pressure that no bench has, or quite another than the stated one.
    """
    pressure = columns[apparatus.pressure.column] if apparatus.pressure is not None else None
    if pressure is not None:
        _check_pressure(apparatus, pressure)
    return growth_setup(apparatus, time, pressure, duration=float(time[-1] - time[0]))


def _check_pressure(apparatus, pressure):
    """Refuse a gauge whose unit, gain or column must be wrong."""
    name, stated = apparatus.pressure.column, apparatus.chamber.pressure
    shown = np.asarray(pressure, dtype=float)
    shown = shown[np.isfinite(shown)] + apparatus.pressure.offset
    start = float(np.median(shown[: max(shown.size // 20, 1)])) if shown.size else np.nan
    remedy = "is it the right column, and its unit the one that its name ends in?"
    if not _PRESSURES[0] < start < _PRESSURES[1]:
        message = (f"column {name} starts at {start * 1e-3:.4g} kPa, where "
                   f"{_PRESSURES[0] * 1e-3:g} to {_PRESSURES[1] * 1e-3:g} kPa can be: {remedy}")
        raise TraceError(message)
    if stated and not 1.0 / _APART < start / stated < _APART:
        message = (f"column {name} starts at {start * 1e-3:.4g} kPa, chamber.pressure_kPa is "
                   f"{stated * 1e-3:.4g} kPa: {remedy}")
        raise TraceError(message)


def pulse_kernel(setup, store=None):
    """Return the kernel of a pulse's bench and the indices to use it at.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    store : object, optional
        Where kernel tables are kept.

    Returns
    -------
    kernel : BenchKernel
        Of the bench.
    relative : ndarray of complex, shape (n_beams,)
        Index of the liquid over that of the gas in each beam [-].
    index : ndarray, shape (n_beams,)
        Of the liquid, real part [-].
    """
    apparatus, path = setup.apparatus, setup.path
    state = path.reference_temperature, path.reference_pressure, setup.droplet_temperature
    gas_indices, liquid = beam_indices(apparatus, setup.gas, setup.substance, state)
    relative = liquid / gas_indices
    reach = [min(ANGLE_SIGMAS * apparatus.sigmas.get(f"detector.{d.column}.angle_deg", 0.0),
                 LARGEST_ANGLE) for d in apparatus.detectors]
    kernel = build_bench_kernel(
        apparatus, gas_indices, relative, store, index_reach=INDEX_STEP, angle_reach=reach
    )
    return kernel, relative, liquid.real


def pulse_model(setup, kernel, relative, angles):
    """Return the forward model at one relative index and at shifted angles.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    kernel : BenchKernel
        Of the bench.
    relative : ndarray of complex, shape (n_beams,)
        Index of the liquid over that of the gas in each beam [-].
    angles : sequence of float
        Shift of each detector's angle [rad].

    Returns
    -------
    model : PulseModel
        The forward model.
    """
    apparatus = setup.apparatus
    turning = any(f"detector.{d.column}.angle_deg" in apparatus.sigmas
                  for d in apparatus.detectors)
    table = kernel.at(relative, np.array(angles) if any(angles) else None, derivatives=turning)
    rows = [*table.collected, *table.extinction, table.lost]
    count, lost = len(apparatus.detectors), len(rows) - 1
    if turning:
        rows += list(table.d_collected_d_angle)
    channels = [
        Channel(d.column, "scatter", i, apparatus.chamber.path, d.gain, d.time_constant,
                count + apparatus.beam_number(d), lost + 1 + i if turning else None)
        for i, d in enumerate(apparatus.detectors)
    ]
    if apparatus.transmission is not None:
        t = apparatus.transmission
        channels.append(Channel(t.column, "transmission", lost, t.path, None, 0.0, lost))
    # Sizes that scatter next to nothing are cut; every second point carries the averaged curves.
    first = int(np.searchsorted(table.radius * kernel.wavenumber, _LEAST_SIZE))
    light = cloud_light(
        np.array(rows)[:, first::_STRIDE], table.log_radius_start + first * table.step,
        _STRIDE * table.step,
    )
    return PulseModel(setup, light, tuple(channels), extinction_row=count + kernel.transmitted)


def reangled(prepared, angles):
    """Return a pulse with its tables at shifted angles.

    Parameters
    ----------
    prepared : Prepared
        A pulse.
    angles : sequence of float
        Shift of each detector's angle from the chamber file's [rad].

    Returns
    -------
    prepared : Prepared
        The same pulse.
    """
    relative = prepared.relative_index
    return replace(
        prepared,
        model=pulse_model(prepared.setup, prepared.kernel, relative, angles),
        index_model=pulse_model(prepared.setup, prepared.kernel, relative + INDEX_STEP, angles),
        angles=tuple(angles),
    )


def prepare(apparatus, time, columns, store=None, exclude=()):
    """Return a pulse ready for the fit.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    time : ndarray, shape (n,)
        Samples [s].
    columns : dict of str to ndarray
        Trace columns, volts and pascal.
    store : object, optional
        Where kernel tables are kept.
    exclude : sequence of tuple of float
        Ranges of time to leave out [s].

    Returns
    -------
    prepared : Prepared
        Setup, model and samples.

    Raises
    ------
    TraceError
        If fewer than 20 samples of a column can be used.
    """
    recorded = {"time": time, "columns": columns}
    setup = prepare_setup(apparatus, time, columns)
    kept = span(apparatus, time)
    time, columns = time[kept], {name: np.asarray(v)[kept] for name, v in columns.items()}
    window = window_of(apparatus, time, exclude)
    baseline = _baseline(apparatus, setup, time)
    optical = _normalised(apparatus, time, columns, baseline)
    channels = []
    for column, kind, record in optical_columns(apparatus):
        clipped = _clipped(columns[column], getattr(record, "full_scale", None))
        data = channel_data(column, kind, optical[column], window, baseline, clipped)
        if data.used.sum() < FEWEST:
            message = (
                f"column {column} has {int(data.used.sum())} usable samples, fewer than "
                f"{FEWEST}: widen analysis.window_ms or look at the recording"
            )
            raise TraceError(message)
        channels.append(data)
    return replace(assembled(setup, store, time, channels, window),
                   restate=partial(prepare_setup, **recorded))


def assembled(setup, store, time, channels, window):
    """Return a pulse with the models of its light.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.
    store : object or None
        Where kernel tables are kept.
    time : ndarray, shape (n,)
        Samples [s].
    channels : sequence of ChannelData
        Of the optical columns.
    window : ndarray, shape (n,)
        Samples that may be fitted [bool].

    Returns
    -------
    prepared : Prepared
        Ready for the fit.
    """
    kernel, relative, index = pulse_kernel(setup, store)
    straight = (0.0,) * len(setup.apparatus.detectors)
    return Prepared(
        setup, pulse_model(setup, kernel, relative, straight),
        pulse_model(setup, kernel, relative + INDEX_STEP, straight),
        kernel, relative, index, time, tuple(channels), window, straight,
        _varied_kernels(setup, store),
    )


def _varied_kernels(setup, store):
    """Return kernels with what only tables know moved by its stated standard uncertainty."""
    bench, found = setup.apparatus, []
    for path, sigma in bench.sigmas.items():
        if path.rpartition(".")[2] not in _CONES:
            continue
        value = value_in(bench, path)
        if value is not None:
            other = replace(setup, apparatus=with_value(bench, path, value + sigma))
            found.append((path, pulse_kernel(other, store)[0]))
    return tuple(found)


def _clipped(values, full_scale):
    """Return the samples within one resolution step of full scale, as recorded [bool]."""
    values = np.asarray(values, dtype=float)
    if full_scale is None:
        return np.zeros(values.size, dtype=bool)
    step = resolution_step(values[np.isfinite(values)])
    return np.abs(values) >= full_scale - max(step, 1e-6 * full_scale)


def _baseline(apparatus, setup, time):
    """Return which samples show no droplets yet, shape (n,) [bool]."""
    if apparatus.analysis.baseline is not None:
        low, high = apparatus.analysis.baseline
        return (time >= low) & (time <= high)
    if setup.clock_known:
        before = time < setup.births.times[0]
        if before.sum() >= 5:
            return before
    first = np.zeros(time.size, dtype=bool)
    first[: max(time.size // 50, 5)] = True
    return first


def _normalised(apparatus, time, columns, baseline):
    """Return the optical columns divided by the laser-power monitor where there is one [V]."""
    names = [name for name, _, _ in optical_columns(apparatus)]
    found = {name: np.asarray(columns[name], dtype=float) for name in names}
    darks = {t.column: t.dark for t in apparatus.detectors if t.dark}
    if apparatus.transmission is not None and apparatus.transmission.dark:
        darks[apparatus.transmission.column] = apparatus.transmission.dark
    found = {name: values - darks.get(name, 0.0) for name, values in found.items()}
    if apparatus.reference is None:
        return found
    monitor = np.asarray(columns[apparatus.reference.column], dtype=float)
    monitor = monitor - apparatus.reference.dark
    rest = float(np.nanmedian(monitor[baseline]))
    relative = monitor / rest if rest else np.full(time.size, np.nan)
    relative = np.where(relative > 0.02, relative, np.nan)
    only = apparatus.reference.beam
    seen = {name for name, _, record in optical_columns(apparatus) if only in (None, record.beam)}
    return {name: values / relative if name in seen else values for name, values in found.items()}
