"""Whether a gain stayed the same through a series."""

from dataclasses import dataclass

import numpy as np
from scipy.special import gammaincc

_KNOWN = 0.25
_FEWEST = 3


@dataclass(frozen=True)
class GainDrift:
    """One detector's gain pulse by pulse, the rest of the bench as all pulses have it."""

    key: str
    names: tuple
    """Pulses that fix it to a quarter."""
    places: np.ndarray
    """Where each stands on the axis, shape (n,)."""
    relative: np.ndarray
    """ln of the pulse's gain over the common one, shape (n,) [-]."""
    sigma: np.ndarray
    """Its standard uncertainty, the rest of the bench given, shape (n,) [-]."""
    change: float
    """Of a straight line, from the first to the last pulse, ln of gain [-]."""
    change_sigma: float
    """Its standard uncertainty, widened where the pulses scatter more than their sigmas [-]."""
    chi2: float
    """Of constancy [-]."""
    probability: float
    """That a constant gain scatters as much [-]."""


def gain_drift(joint, unknowns, places):
    """Return how each gain goes through the series.

    Parameters
    ----------
    joint : Joint
        The joint estimate.
    unknowns : sequence of Unknown
        What is shared.
    places : dict of str to float
        Pulse to its place on the axis, in any unit.

    Returns
    -------
    drifts : tuple of GainDrift
        One for each gain that at least three pulses fix to a quarter.
    """
    found = []
    for k, unknown in enumerate(unknowns):
        if not unknown.key.endswith(".gain_V_m"):
            continue
        rows = []
        for one in joint.answers:
            known = one.information[k, k]
            if known > _KNOWN**-2.0:
                rows.append((one.name, places[one.name], -one.gradient[k] / known, known**-0.5))
        if len(rows) >= _FEWEST:
            found.append(_line(unknown.key, rows))
    return tuple(found)


def _line(key, rows):
    """Return the weighted straight line and the chi-square of constancy."""
    names, place, relative, sigma = (np.array(part) for part in zip(*rows, strict=True))
    weight = sigma**-2.0
    mean = float(weight @ relative / weight.sum())
    chi2 = float(weight @ (relative - mean) ** 2)
    centred = place - weight @ place / weight.sum()
    power = float(weight @ centred**2)
    span = float(np.ptp(place))
    slope = float(weight @ (centred * relative)) / power if power > 0.0 else 0.0
    left = float(weight @ (relative - mean - slope * centred) ** 2)
    wider = np.sqrt(max(1.0, left / max(len(rows) - 2, 1)))
    error = wider / np.sqrt(power) if power > 0.0 else 0.0
    return GainDrift(
        key, tuple(str(n) for n in names), place, relative, sigma, slope * span, error * span,
        chi2, float(gammaincc(0.5 * (len(rows) - 1), 0.5 * chi2)),
    )
