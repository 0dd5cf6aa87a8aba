"""The uncertainty once more: the whole analysis repeated with inputs drawn from their sigmas."""

from dataclasses import replace

import numpy as np

from scatterfit.apparatus.records import Apparatus
from scatterfit.measured_pulse.measure import measure
from scatterfit.measured_pulse.record import Quantity

_FEWEST = 10


def monte_carlo(apparatus, time, columns, result, settings):
    """Return the spread of the results over repeated analyses.

    In each trial every input that is stated with a sigma is drawn anew, the trace is replaced by
    its fit with fresh noise, and the analysis starts from nothing: search, fit, number.

    Parameters
    ----------
    apparatus : Apparatus
        The bench as stated.
    time : ndarray, shape (n,)
        Samples [s].
    columns : dict of str to ndarray
        Trace columns, volts and pascal.
    result : MeasuredPulse
        Of the trace itself.
    settings : dict
        ``"trials"``, ``"seed"``, ``"store"``, ``"exclude"`` and ``"progress"``, a function called
        with the number of trials done.

    Returns
    -------
    spread : dict of str to Quantity
        Mean and standard deviation of ``"final_radius"`` [m], ``"concentration"`` [1/m^3] and
        ``"nucleation_rate"`` [1/(m^3 s)], where determined in most trials.

    References
    ----------
    .. [1] JCGM 101:2008, Propagation of distributions using a Monte Carlo method.
    """
    generator = np.random.default_rng(settings["seed"])
    seen = {"final_radius": [], "concentration": [], "nucleation_rate": []}
    for trial in range(settings["trials"]):
        bench, offsets = drawn(apparatus, generator)
        again = measure(
            bench, time, renoised(columns, result, generator), store=settings["store"],
            exclude=settings["exclude"], angle_offsets=offsets,
        )
        values = {"final_radius": again.final_radius, "concentration": again.concentration,
                  "nucleation_rate": again.nucleation.rate}
        for name, value in values.items():
            if value is not None:
                seen[name].append(value.value)
        settings["progress"](trial + 1)
    least = max(_FEWEST, settings["trials"] // 2)
    return {
        name: Quantity(float(np.mean(v)), float(np.std(v, ddof=1)))
        for name, v in seen.items() if len(v) >= least
    }


def renoised(columns, result, generator):
    """Return the columns with each fitted channel replaced by its fit and fresh noise.

    Parameters
    ----------
    columns : dict of str to ndarray
        Trace columns [V, Pa].
    result : MeasuredPulse
        With its channels.
    generator : numpy.random.Generator
        Of the noise.

    Returns
    -------
    columns : dict of str to ndarray
        New columns; samples that were not fitted stay as they are.
    """
    fresh = dict(columns)
    for channel in result.channels:
        raw = np.asarray(columns[channel.column], dtype=float).copy()
        count = channel.time.size
        left = channel.signal - channel.fit
        some = channel.used & (np.abs(channel.residual) > 1e-9)
        sigma = np.zeros(count)
        sigma[some] = np.abs(left[some] / channel.residual[some])
        change = np.where(channel.used, -left + sigma * generator.standard_normal(count), 0.0)
        raw[:count] += change
        fresh[channel.column] = raw
    return fresh


def drawn(apparatus, generator):
    """Return a bench whose stated values are drawn from their sigmas, and angle offsets.

    Parameters
    ----------
    apparatus : Apparatus
        The bench as stated.
    generator : numpy.random.Generator
        Of the draws.

    Returns
    -------
    bench : Apparatus
        With other values; angles stay, as their tables are.
    offsets : tuple of float
        By how much each stated angle is off [rad].
    """
    sigmas = apparatus.sigmas

    def draw(value, key, positive=True):
        if value is None or key not in sigmas:
            return value
        new = value + sigmas[key] * float(generator.standard_normal())
        return max(new, 1e-3 * value) if positive else new

    detectors, offsets = [], []
    for d in apparatus.detectors:
        detectors.append(replace(d, gain=draw(d.gain, f"detector.{d.column}.gain_V_m")))
        spread = sigmas.get(f"detector.{d.column}.angle_deg", 0.0)
        offsets.append(spread * float(generator.standard_normal()))
    vapour, chamber = apparatus.vapour, apparatus.chamber
    first, *others = (
        replace(beam, refractive_index=draw(
            beam.refractive_index, f"{apparatus.path_of(beam)}.refractive_index", positive=False))
        for beam in apparatus.beams
    )
    index = draw(vapour.refractive_index, "vapour.refractive_index", positive=False)
    changes = {
        "beam": first, "other_beams": tuple(others),
        "detectors": tuple(detectors),
        "vapour": replace(
            vapour, refractive_index=index,
            mole_fraction=draw(vapour.mole_fraction, "vapour.mole_fraction"),
            partial_pressure=draw(vapour.partial_pressure, "vapour.partial_pressure_kPa"),
            saturation_ratio=draw(vapour.saturation_ratio, "vapour.saturation_ratio"),
            dew_point=draw(vapour.dew_point, "vapour.dew_point_K"),
        ),
        "chamber": replace(
            chamber, temperature=draw(chamber.temperature, "chamber.temperature_K"),
            pressure=draw(chamber.pressure, "chamber.pressure_kPa"),
            path=draw(chamber.path, "chamber.path_mm"),
        ),
    }
    return _stated_states(replace(apparatus, **changes), draw), tuple(offsets)


def _stated_states(apparatus: Apparatus, draw) -> Apparatus:
    """Return the bench with its transmission, growth and hold drawn too."""
    changes = {}
    if apparatus.transmission is not None:
        path = draw(apparatus.transmission.path, "transmission.path_mm")
        changes["transmission"] = replace(apparatus.transmission, path=path)
    if apparatus.growth is not None:
        changes["growth"] = replace(
            apparatus.growth,
            temperature=draw(apparatus.growth.temperature, "growth.temperature_K"),
            pressure=draw(apparatus.growth.pressure, "growth.pressure_kPa"),
        )
    if apparatus.pulse is not None:
        changes["pulse"] = replace(
            apparatus.pulse, hold=draw(apparatus.pulse.hold, "pulse.hold_ms"),
            temperature=draw(apparatus.pulse.temperature, "pulse.temperature_K"),
            pressure=draw(apparatus.pulse.pressure, "pulse.pressure_kPa"),
        )
    return replace(apparatus, **changes)
