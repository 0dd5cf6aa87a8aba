"""The number of droplets: from every handle, with statistical and systematic parts."""

from dataclasses import dataclass, field

import numpy as np

from scatterfit.forward.light import spread_table
from scatterfit.inversion.verdict import Finding
from scatterfit.measured_pulse.quantities import Derived, quantity
from scatterfit.measured_pulse.record import Concentration, Quantity

_DETERMINED = 0.5
# Little depletion rests on the shape of the computed growth, to parts in a thousand.
_DETERMINED_ALONE = 0.12
_DEPLETION = 0.2
_KERNEL = 5e-4
_THICK = 0.05
_SECOND_ORDER = 0.1
_TENSION = 3.0

COUNTING = "counting of droplets"
TWICE = "light scattered twice"
"""Lines of the number's budget that no parameter of the fit stands for."""


@dataclass(frozen=True)
class NumberResults:
    """All that is said about the number."""

    concentration: Concentration | None
    by_handle: dict
    findings: list = field(default_factory=list)
    noise: float = 0.0
    """Variance from the noise [1/m^6]."""
    parts: dict = field(default_factory=dict)
    """Variance by input, counting and second-order light among them [1/m^6]."""
    floor: float = 0.0
    """Standard uncertainty of the kernel [1/m^3]."""


def number_results(prepared, fit, posterior):
    """Return the number density at the reference state, and by handle.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        Best cloud.
    posterior : Posterior
        Covariance and handles.

    Returns
    -------
    results : NumberResults
        ``None`` for what the data do not determine.
    """
    cloud = fit.best.cloud
    log, noise, parts = quantity(Derived(cloud.number, {"number": 1.0}), posterior)
    depth = _side_depth(prepared, fit)
    second = _second_order(prepared, depth)
    counting = _counting(prepared, log.value)
    handles = _handles(prepared, cloud, posterior, second, counting)
    findings = _depth_finding(prepared, depth)
    alone = handles["gain"] is None and handles["transmission"] is None
    if not log.sigma < (_DETERMINED_ALONE if alone else _DETERMINED):
        findings.append(Finding("no-number", (
            "nothing here fixes the number: give detector gain_V_m (a calibration), a "
            "transmission with its path, or more droplets so that the vapour visibly depletes"
        )))
        return NumberResults(None, handles, findings)
    value = float(np.exp(log.value))
    floor = float(np.hypot(_KERNEL, second if handles["gain"] else 0.0))
    statistical = value * np.sqrt(noise + counting**2)
    systematic = value * np.sqrt(sum(parts.values()) + floor**2)
    concentration = Concentration(
        value, float(np.hypot(statistical, systematic)), float(statistical), float(systematic)
    )
    findings += _tension(handles)
    if alone:
        findings.append(Finding("number-from-depletion", (
            "the number rests on the depletion of the vapour alone, so on temperature and "
            "humidity; a gain or a transmission would check it"
        )))
    parts |= {COUNTING: counting**2, TWICE: floor**2 - _KERNEL**2}
    return NumberResults(
        concentration, handles, findings, float(noise * value**2),
        {key: part * value**2 for key, part in parts.items()}, _KERNEL * value,
    )


def _handles(prepared, cloud, posterior, second, counting):
    """Return the number by each handle that determines it."""
    found = {"gain": None, "transmission": None, "depletion": None}
    has_transmission = prepared.setup.apparatus.transmission is not None
    for key, (shift, sigma) in posterior.handles.items():
        if key == "transmission" and not has_transmission:
            continue
        extra = {"gain": np.hypot(second, counting)}.get(key, 0.0)
        relative = float(np.sqrt(sigma**2 + extra**2 + _KERNEL**2))
        if relative < (_DEPLETION if key == "depletion" else _DETERMINED) and abs(shift) < 2.0:
            value = float(np.exp(cloud.number + shift))
            found[key] = Quantity(value, value * relative)
    return found


def _side_depth(prepared, fit):
    """Return the largest optical depth in any detector's beam over the chamber's path [-]."""
    path = prepared.setup.apparatus.chamber.path
    transmission = prepared.setup.apparatus.transmission
    path = max(path, transmission.path if transmission else 0.0)
    state = fit.best.state
    table = spread_table(fit.problem.model.light, fit.best.cloud.variance)
    place = (np.log(np.maximum(state.radius, 1e-9)) - table.start) / table.step
    model = fit.problem.model
    rows = {c.dimming_row for c in model.channels if c.kind == "scatter"} or {model.extinction_row}
    depths = [
        np.max(state.number_density * path * (
            state.growth.weights @ np.interp(place, np.arange(row.size), row)))
        for row in table.values[sorted(rows)]
    ]
    return float(max(depths))


def _second_order(prepared, depth):
    """Return the relative uncertainty of scattered light by light scattered twice [-].

    It grows with the optical depth and towards the side, where single scattering is weakest
    (common practice, no source).
    """
    angles = [d.angle for d in prepared.setup.apparatus.detectors]
    if not angles:
        return 0.0
    return _SECOND_ORDER * depth * float(np.mean(np.abs(np.sin(angles))))


def _counting(prepared, log_number):
    """Return the relative counting noise of the droplets in the viewed volume [-]."""
    volumes = [d.volume for d in prepared.setup.apparatus.detectors if d.volume]
    if not volumes:
        return 0.0
    return float(1.0 / np.sqrt(max(np.exp(log_number) * max(volumes), 1e-9)))


def _depth_finding(prepared, depth):
    """Return the warning about light scattered twice."""
    angles = [np.degrees(d.angle) for d in prepared.setup.apparatus.detectors]
    if depth < _THICK or not angles:
        return []
    return [Finding("multiple-scattering", (
        f"the optical depth reaches {depth:.2f}: light scattered twice adds to the signal, most in "
        f"the troughs and at the side (detectors at {', '.join(f'{a:.0f}' for a in angles)} "
        "degrees); it is in the sigma, not in the model. A shorter path would lower it"
    ))]


def _tension(handles):
    """Return a reason where two handles disagree, with the likely culprit."""
    present = {key: value for key, value in handles.items() if value is not None}
    found = []
    keys = list(present)
    for i, first in enumerate(keys):
        for second in keys[i + 1:]:
            a, b = present[first], present[second]
            apart = np.log(a.value / b.value)
            sigma = np.hypot(a.sigma / a.value, b.sigma / b.value)
            if abs(apart) > _TENSION * sigma:
                found.append((first, second, apart, abs(apart) / sigma))
    if not found:
        return []
    count = {key: sum(key in pair[:2] for pair in found) for key in keys}
    most = max(count.values())
    suspects = [key for key in keys if count[key] == most]
    words = {
        "gain": "the detector's gain has changed, its window is fogged, or droplets are lost",
        "transmission": "transmission.path_mm is off, the window fogs, or the laser drifts",
        "depletion": "the vapour or chamber.temperature_K is off",
    }
    first, second, apart, sigmas = max(found, key=lambda pair: pair[3])
    text = (
        f"the number by {first} is {np.exp(apart):.3f} times that by {second} "
        f"({sigmas:.1f} sigma); likely {' or '.join(words[key] for key in suspects)}"
    )
    return [Finding("handles-disagree", text)]


def final_depth(prepared, fit):
    """Return the optical depth at the last sample.

    Parameters
    ----------
    prepared : Prepared
        The pulse.
    fit : Fit
        Best cloud.

    Returns
    -------
    depth : float or None
        Over the transmission's path, else the chamber's; ``None`` without either [-].
    """
    apparatus = prepared.setup.apparatus
    path = apparatus.transmission.path if apparatus.transmission else apparatus.chamber.path
    if not path:
        return None
    state = fit.best.state
    table = spread_table(fit.problem.model.light, fit.best.cloud.variance)
    place = (np.log(np.maximum(state.radius[:, -1], 1e-9)) - table.start) / table.step
    row = table.values[fit.problem.model.extinction_row]
    mean = float(state.growth.weights @ np.interp(place, np.arange(row.size), row))
    return float(state.number_density[-1] * mean * path)
