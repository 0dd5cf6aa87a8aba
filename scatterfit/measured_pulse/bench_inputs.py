"""What the bench's stated uncertainties do to the trace, as further columns of the fit."""

import numpy as np

from scatterfit.apparatus.correlations import correlation_block
from scatterfit.apparatus.keys import HUMIDITY
from scatterfit.forward.model import channel_signals
from scatterfit.inversion.prior import depletion_sigma
from scatterfit.measured_pulse.prepare import optical_columns
from scatterfit.measured_pulse.restated_inputs import grown_inputs, seen_inputs

_CREEP = 0.02
"""Two percent: how far the gas may warm, leak or mix during one pulse (common practice)."""
_INDEPENDENT = 2e-3


def bench_inputs(prepared, problem, best, index_shift=2e-4):
    """Return what is let loose, within its sigma, when the fit's uncertainty is worked out.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    problem : Problem
        What was fitted.
    best : Evaluation
        The solution.
    index_shift : float
        By how much the index model is off [-].

    Returns
    -------
    inputs : dict
        ``"names"``, ``"more"``, ``"grown"`` and ``"priors"`` for :func:`posterior`.
    """
    priors, columns = {}, []
    for name, sigma, parts in _signal_inputs(prepared, problem, best, index_shift):
        priors[name] = (0.0, sigma)
        columns.append((name, parts))
    for name, parts in seen_inputs(prepared, problem, best):
        priors[name] = (0.0, 1.0)
        columns.append((name, parts))
    grown = grown_inputs(prepared, best)
    priors |= dict.fromkeys(grown, (0.0, 1.0))
    priors["creep"] = (0.0, _CREEP)
    # The fit's own prior holds the path's share as well, which has a column of its own here.
    priors["depletion"] = (0.0, depletion_sigma(prepared.setup))
    return {"names": ("creep", *grown), "more": columns, "priors": priors, "grown": grown,
            "correlations": _correlations(prepared, {**problem.priors, **priors})}


def _correlations(prepared, priors):
    """Return the names of priors whose errors are stated to be correlated, and how."""
    apparatus = prepared.setup.apparatus
    if apparatus.correlations is None:
        return None
    known = {f"detector.{d.column}.angle_deg": f"angle:{i}"
             for i, d in enumerate(apparatus.detectors)}
    state = "growth" if apparatus.growth is not None else "chamber"
    known |= {f"{state}.temperature_K": "temperature", "analysis.growth_scale": "scale",
              "vapour.mass_accommodation": "accommodation"}
    known |= {f"vapour.{name}": "vapour" for name in HUMIDITY}
    paths = [path for path in apparatus.correlations.of
             if path in apparatus.sigmas and known.get(path, path) in priors]
    matrix = np.array(correlation_block(apparatus, paths)).reshape(len(paths), len(paths))
    # Rounded coefficients may not be those of any errors: a trace of independence.
    matrix = (1.0 - _INDEPENDENT) * matrix + _INDEPENDENT * np.eye(len(paths))
    return [known.get(path, path) for path in paths], matrix


def vapour_relative_sigma(apparatus):
    """Return the stated relative uncertainty of the vapour fraction, zero if none is [-].

    Parameters
    ----------
    apparatus : Apparatus
        The bench.

    Returns
    -------
    sigma : float
        Relative standard uncertainty [-].
    """
    vapour, sigmas = apparatus.vapour, apparatus.sigmas
    for key, field in (("mole_fraction", vapour.mole_fraction),
                       ("partial_pressure_kPa", vapour.partial_pressure),
                       ("saturation_ratio", vapour.saturation_ratio)):
        if field:
            return sigmas.get(f"vapour.{key}", 0.0) / field
    # A dew point: 7 percent of vapour pressure a kelvin for water near room temperature.
    return 0.07 * sigmas.get("vapour.dew_point_K", 0.0)


def temperature_relative_sigma(apparatus):
    """Return the stated relative uncertainty of the undisturbed temperature, zero if none is [-].

    Parameters
    ----------
    apparatus : Apparatus
        The bench.

    Returns
    -------
    sigma : float
        Relative standard uncertainty [-].
    """
    sigmas = apparatus.sigmas
    if apparatus.growth is not None:
        return sigmas.get("growth.temperature_K", 0.0) / apparatus.growth.temperature
    return sigmas.get("chamber.temperature_K", 0.0) / apparatus.chamber.temperature


def _signal_inputs(prepared, problem, best, index_shift):
    """Return (name, sigma, derivative of each channel's shape) of inputs that act on the light."""
    time = problem.bins.time
    cloud, linear = best.cloud, best.state.linear
    apparatus, model = prepared.setup.apparatus, problem.model
    signals, _ = channel_signals(model, cloud, time, ("number",), linear)
    none = np.zeros_like(time)
    found = []
    for i, channel in enumerate(model.channels):
        parts = [none] * len(model.channels)
        if channel.kind == "scatter" and channel.gain is not None:
            sigma = apparatus.sigmas.get(f"detector.{channel.column}.gain_V_m", 0.0)
            if sigma:
                parts[i] = signals[i].shape
                found.append((f"detector.{channel.column}.gain_V_m", sigma / channel.gain, parts))
        if channel.kind == "transmission":
            sigma = apparatus.sigmas.get("transmission.path_mm", 0.0)
            if sigma and channel.path:
                parts[i] = signals[i].by["number_extinction"]
                found.append(("transmission.path_mm", sigma / channel.path, parts))
    sigma = apparatus.sigmas.get("chamber.path_mm", 0.0)
    if sigma and apparatus.chamber.path:
        parts = [s.by["number_extinction"] if c.kind == "scatter" else none
                 for s, c in zip(signals, model.channels, strict=True)]
        found.append(("chamber.path_mm", sigma / apparatus.chamber.path, parts))
    inputs = _index_inputs(prepared)
    if inputs:
        # The two index models share their angles' base; the difference is the index alone.
        plain, _ = channel_signals(prepared.model, cloud, time, (), linear)
        shifted, _ = channel_signals(prepared.index_model, cloud, time, (), linear)
        parts = [(b.shape - a.shape) / index_shift for a, b in zip(plain, shifted, strict=True)]
        seen = [apparatus.beam_number(record) for _, _, record in optical_columns(apparatus)]
        for name, sigma, beams in inputs:
            found.append((name, sigma, [part if beam in beams else none
                                        for part, beam in zip(parts, seen, strict=True)]))
    return found


def _index_inputs(prepared):
    """Return (name, standard uncertainty, beams it moves) of what is uncertain in the index [-].

    What is stated for a beam is its own; a stated index of the vapour or a correlation is off by
    the same in all beams.
    """
    bench = prepared.setup.apparatus
    found, shared = [], []
    for number, beam in enumerate(bench.beams):
        path = f"{bench.path_of(beam)}.refractive_index"
        if beam.refractive_index is None and path not in bench.sigmas:
            shared.append(number)
        elif bench.sigmas.get(path):
            found.append((path, float(bench.sigmas[path]), (number,)))
    sigma = bench.sigmas.get("vapour.refractive_index")
    if sigma is None and bench.vapour.refractive_index is None:
        sigma = prepared.setup.substance.refractive_index.uncertainty
    if sigma and shared:
        found.append(("vapour.refractive_index", float(sigma), tuple(shared)))
    return found
