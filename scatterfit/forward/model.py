"""What each channel would show: the light of a cloud, attenuated, and its derivatives."""

from dataclasses import dataclass

import numpy as np

from scatterfit.compiled import compiled
from scatterfit.droplet_growth.setup import GrowthSetup
from scatterfit.forward.cloud_state import CloudState
from scatterfit.forward.growth_model import linear_growth
from scatterfit.forward.light import CloudLight, look_up, spread_table
from scatterfit.forward.low_pass import low_pass


@dataclass(frozen=True)
class Channel:
    """One optical channel as the model needs it."""

    column: str
    kind: str
    """``"scatter"`` or ``"transmission"``."""
    row: int
    """Row of its cross section in the light; for a transmission that of what it loses."""
    path: float
    """Cloud that attenuates it [m]."""
    gain: float | None
    """[V m]; ``None`` where the amplitude is free."""
    time_constant: float
    """[s]."""
    dimming_row: int
    """Row of what attenuates its light: extinction in its beam, or what a transmission loses."""
    angle_row: int | None = None
    """Row with the derivative of its cross section by the angle [m^2/rad]."""


@dataclass(frozen=True)
class PulseModel:
    """One pulse's forward model."""

    setup: GrowthSetup
    light: CloudLight
    channels: tuple[Channel, ...]
    extinction_row: int
    """Row of extinction in the beam whose optical depth is quoted."""


@dataclass(frozen=True)
class ChannelSignal:
    """One channel's noiseless shape and its derivatives."""

    shape: np.ndarray
    """Volts per unit amplitude, or transmission, shape (n,)."""
    by: dict
    """Derivatives by parameter, each of shape (n,); the number's is split by what it acts
    through: ``"number_gain"``, ``"number_extinction"``, ``"number_depletion"``."""


def channel_signals(model, cloud, time, names=(), linear=None, near=None):
    """Return what every channel would show without noise and offset.

    A detector shows ``gain n C exp(-n C_ext path)`` with its cross section averaged over the
    cloud (``gain`` is 1 where none is known); the transmission shows ``exp(-n C_ext path)``.

    Parameters
    ----------
    model : PulseModel
        Of the pulse.
    cloud : Cloud
        Where to evaluate.
    time : ndarray, shape (n,)
        Samples [s].
    names : sequence of str
        Parameters to differentiate by.
    linear : LinearGrowth, optional
        Growth solved nearby, with derivatives by all the names that move it; solved at the cloud
        where it is missing.
    near : SpreadTable, optional
        A table of nearly the right spread.

    Returns
    -------
    signals : list of ChannelSignal
        One a channel.
    state : CloudState
        The cloud behind them.
    """
    if linear is None:
        linear = linear_growth(model.setup, cloud, names)
    table = spread_table(model.light, cloud.variance, near)
    state = CloudState(linear, cloud, time, tuple(names), model.setup.births, table)
    if compiled():
        return _compiled_signals(model, state), state
    parts = [_cross_sections(model, cloud, table, segment, names) for segment in state.segments]
    mean = np.concatenate([part[0] for part in parts], axis=1)
    mean_by = {
        name: np.concatenate([part[1][name] for part in parts], axis=1) for name in parts[0][1]
    }
    signals = [
        _one_channel(model, i, (state, mean, mean_by), time, names)
        for i in range(len(model.channels))
    ]
    return signals, state


def _compiled_signals(model, state):
    """Return what the array code would, one signal a channel."""
    from scatterfit.forward.light_compiled import signals  # noqa: PLC0415  (loads numba)

    return [ChannelSignal(*found) for found in signals(model, state)]


def _cross_sections(model, cloud, table, segment, names):
    """Return the cross sections averaged over the classes, (rows, n), and their derivatives."""
    born = segment.radius > 0.0
    log_radius = np.log(np.maximum(segment.radius, np.exp(table.start)))
    values, slopes, bends = look_up(table, log_radius, cloud.variance, derivatives=bool(names))
    weights = np.where(born, segment.weights[:, None], 0.0)
    mean = np.einsum("cn,rcn->rn", weights, values)
    for detector, channel in enumerate(model.channels):
        if channel.angle_row is not None and cloud.angles:
            mean[channel.row] += cloud.angles[detector] * mean[channel.angle_row]
            if names:
                slopes[channel.row] += cloud.angles[detector] * slopes[channel.angle_row]
    mean_by = {
        name: np.einsum("cn,rcn->rn", weights * segment.log_radius_by[name], slopes)
        for name in names if name in segment.log_radius_by
    }
    if "variance" in names:
        mean_by["variance"] = np.einsum("cn,rcn->rn", weights, bends)
    return mean, mean_by


def _one_channel(model, position, cloud_light, time, names):
    """Return one channel's signal."""
    state, mean, mean_by = cloud_light
    channel = model.channels[position]
    density = state.number_density
    scatter = channel.kind == "scatter"
    row = channel.dimming_row
    depth = density * mean[row] * channel.path
    light = np.exp(-depth)
    own = mean[channel.row]
    shape = (channel.gain or 1.0) * density * own * light if scatter else light
    bright = (channel.gain or 1.0) * density * light
    rows, order = [shape], []
    for name in names:
        change = mean_by.get(name)
        thinner = state.log_density_by.get(name)
        part = np.zeros_like(shape)
        if change is not None:
            if scatter:
                part = part + bright * change[channel.row]
            part = part - shape * density * channel.path * change[row]
        if thinner is not None:
            if name == "number":
                thinner = thinner - 1.0
            part = part + shape * thinner * ((1.0 if scatter else 0.0) - depth)
        if name == f"angle:{position}" and channel.angle_row is not None:
            part = part + bright * mean[channel.angle_row]
        if name == "number":
            order += ["number_depletion", "number_gain", "number_extinction"]
            rows += [part, shape if scatter else np.zeros_like(shape), -shape * depth]
        else:
            order.append(name)
            rows.append(part)
    filtered = low_pass(time, np.array(rows), channel.time_constant)
    by = dict(zip(order, filtered[1:], strict=True))
    if "number" in names:
        by["number"] = by["number_depletion"] + by["number_gain"] + by["number_extinction"]
        by["depletion"] = by["number_depletion"]
    return ChannelSignal(filtered[0], by)
