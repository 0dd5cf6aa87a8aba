"""What stated uncertainties do to light and growth when the bench has to be made anew to know."""

from dataclasses import replace
from functools import partial

import numpy as np

from scatterfit import matter
from scatterfit.apparatus.keys import KEYS, KEYS_OF
from scatterfit.apparatus.overrides import split_path
from scatterfit.apparatus.restated import value_in, with_value
from scatterfit.constants import GAS_CONSTANT, ICE_POINT
from scatterfit.errors import ScatterfitError
from scatterfit.forward.growth_model import linear_growth
from scatterfit.forward.light import moved_rows
from scatterfit.forward.model import channel_signals
from scatterfit.matter_substance import PRESSURE_ANCHOR

_PROPERTIES = tuple(key.name for key in KEYS if key.property_name)
_GAS = {
    "growth": ("pressure_kPa",), "pressure": ("offset_kPa", "time_constant_ms"),
    "vapour": ("thermal_accommodation", *_PROPERTIES),
}
_SMALL = 0.01
_SMALL_GROWTH = 3e-3
_FIRST_STEP = 0.05


def seen_inputs(prepared, problem, best):
    """Yield (key path, change of each channel's shape by one standard uncertainty).

    Of what acts on the light alone: wavelength, polarization, cones and low-passes.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    problem : Problem
        What was fitted.
    best : Evaluation
        The solution.

    Yields
    ------
    name : str
        Key path.
    parts : list of ndarray
        One a channel, shape (m,) [V or -].
    """
    shown = _Shown(prepared, problem, best)
    varied = dict(prepared.varied)
    for path, sigma in prepared.setup.apparatus.sigmas.items():
        table, column, name = split_path(path) or ("", "", "")
        if path in varied:
            yield path, shown.tabled(varied[path])
        elif table == "beam" and name == "wavelength_nm":
            yield path, _by_sigma(partial(shown.coloured, column), sigma, _SMALL)
        elif table == "detector" and name == "time_constant_ms":
            yield path, _by_sigma(partial(shown.slower, column), sigma, _SMALL)
        elif path == "transmission.dark_V":
            # Light is counted from there; a detector's baseline is fitted in any case.
            yield path, [np.full(shown.time.size, sigma / factors[0] if c.kind == "transmission"
                                 else 0.0)
                         for c, factors in zip(problem.model.channels, best.coefficients,
                                               strict=True)]


def grown_inputs(prepared, best):
    """Return what one standard uncertainty does to growth: of the gas, the liquid, the gauge.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    best : Evaluation
        The solution.

    Returns
    -------
    changes : dict
        Key path to the changes of ln r of the classes at the nodes, shape (c, m), and of ln of the
        number density, shape (m,).
    """
    bench, found = prepared.setup.apparatus, {}
    for path, sigma in bench.sigmas.items():
        table, _, name = split_path(path) or ("", "", "")
        if path == "chamber.pressure_kPa" and bench.growth is None:
            grown = partial(_expanded, prepared.setup, best)
        elif name in _GAS.get(table, ()) and prepared.restate is not None:
            grown = partial(_restated, prepared, best, path)
        else:
            continue
        changes = _by_sigma(grown, sigma, _SMALL_GROWTH)
        if changes is not None:
            found[path] = tuple(changes)
    return found


def _by_sigma(seen, sigma, small):
    """Return the change of each array by one sigma, from a step that changes none by much.

    Lobes that are moved by a good part of their width are no derivative, and a sigma may be so
    wide that there is no such bench. ``None`` where even a small part of it leads to none.
    """
    before, after = seen(0.0), seen(_FIRST_STEP * sigma)
    if before is None or after is None:
        return None
    moved = max(np.max(np.abs(b - a)) / (np.ptp(a) or 1.0)
                for a, b in zip(before, after, strict=True))
    share = min(1.0, small * _FIRST_STEP / max(moved, 1e-300))
    further = seen(share * sigma)
    if further is None:
        share, further = _FIRST_STEP, after
    return [(b - a) / share for a, b in zip(before, further, strict=True)]


def _expanded(setup, best, change):
    """Return growth in a gas that was expanded from another pressure.

    The gauge tells the pressure; from a higher start the gas has been cooled more, and holds less
    of a vapour that is not stated by its mole fraction.
    """
    cloud = best.cloud
    higher = float(np.log1p(change / setup.start_pressure))
    diluted = 0.0 if setup.apparatus.vapour.mole_fraction is not None else higher
    colder = GAS_CONSTANT / setup.properties.heat_capacity * higher
    cloud = replace(cloud, temperature=cloud.temperature - colder, vapour=cloud.vapour - diluted)
    return _logs(linear_growth(setup, cloud, (), best.state.linear), best.state.linear)


def _restated(prepared, best, path, change):
    """Return growth with the gas or the liquid as another chamber file would have it."""
    setup = prepared.setup
    # A coefficient of one can only be less.
    change = -change if path.endswith("accommodation") else change
    try:
        there = prepared.restate(with_value(setup.apparatus, path, _value(setup, path) + change))
    except ScatterfitError:
        return None
    linear, base = linear_growth(there, best.cloud), best.state.linear
    # Births at one moment in place of several, or none at all, are another kind of pulse.
    alike = linear.growth.square.shape[1] == base.growth.square.shape[1]
    return _logs(linear, base) if alike and linear.growth.converged else None


def _logs(linear, base):
    """Return ln r of the classes and ln of the number density at the nodes of another solution."""
    growth, time = linear.growth, base.growth.time
    born = time > base.growth.birth_times[0][:, None]
    floor = (growth.start_radius + growth.length[0]) ** 2
    square = np.array([np.interp(time, growth.time, row) for row in growth.square[0]])
    radius = np.sqrt(np.maximum(square, floor)) - growth.length[0]
    density = np.interp(time, growth.time, np.log(growth.number_density[0]))
    return np.where(born, np.log(radius), 0.0), density


class _Shown:
    """What the channels show of the cloud that was found, by how far something is moved."""

    def __init__(self, prepared, problem, best):
        self.prepared, self.model, self.time = prepared, problem.model, problem.bins.time
        self.cloud, self.linear = best.cloud, best.state.linear

    def tabled(self, kernel):
        """Return what another kernel shows less what the bench's own does."""
        shapes = [self._shapes(self.prepared.modelled(k), self.linear)
                  for k in (self.prepared.kernel, kernel)]
        return [b - a for a, b in zip(*shapes, strict=True)]

    def coloured(self, name, change):
        """Return the light of a beam whose wavelength is moved.

        A cross section keeps its shape in r / lambda. That the liquid's index changes with the
        wavelength, 3e-5 a nanometre for water in green light, is left out: it is a hundredth of
        what moving the curves does.
        """
        model, bench = self.model, self.model.setup.apparatus
        number = [beam.name if bench.other_beams else "" for beam in bench.beams].index(name)
        seen = [c for c in model.channels if _beam(bench, c) == number]
        rows = {row for c in seen for row in (c.row, c.dimming_row, c.angle_row)
                if row is not None}
        shift = float(np.log1p(change / bench.beams[number].wavelength))
        light = moved_rows(model.light, sorted(rows), shift)
        return self._shapes(replace(model, light=light), self.linear)

    def slower(self, column, change):
        """Return the light with one detector's low-pass moved."""
        channels = tuple(
            replace(c, time_constant=c.time_constant + change) if c.column == column else c
            for c in self.model.channels)
        return self._shapes(replace(self.model, channels=channels), self.linear)

    def _shapes(self, model, linear):
        signals, _ = channel_signals(model, self.cloud, self.time, (), linear)
        return [signal.shape for signal in signals]


def _value(setup, path):
    """Return a key's value; where the file has none, what its correlation gives [SI]."""
    value = value_in(setup.apparatus, path)
    if value is not None:
        return value
    field = KEYS_OF["vapour"][split_path(path)[2]].field
    if field == "diffusivity":
        return float(matter.diffusivity(setup.substance, setup.gas)(ICE_POINT))
    known = getattr(setup.substance, field)
    if field == "molar_mass":
        return float(known)
    at = PRESSURE_ANCHOR if field == "saturation_pressure" else setup.droplet_temperature
    return float(known(at))


def _beam(bench, channel):
    """Return the position of the beam that a channel sees."""
    records = {d.column: d for d in bench.detectors}
    if bench.transmission is not None:
        records[bench.transmission.column] = bench.transmission
    return bench.beam_number(records[channel.column])
