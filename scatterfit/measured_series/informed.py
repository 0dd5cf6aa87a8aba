"""What an estimate rests on: pulses, handles, and what cannot be told apart."""

import numpy as np

from scatterfit.measured_series.record import Pair, in_unit, unit_of

_UNTOLD = 0.9
_ENTANGLED = 0.9
_MOST = 3
_LEAST_SHARE = 0.05


def informed_by(joint, unknowns):
    """Return, for each unknown, which pulses and handles inform it.

    Parameters
    ----------
    joint : Joint
        The estimate.
    unknowns : sequence of Unknown
        What is shared.

    Returns
    -------
    texts : list of str
        One for each unknown.
    """
    ratio = np.sqrt(np.diag(joint.covariance) / np.diag(joint.before))
    texts = []
    for k, unknown in enumerate(unknowns):
        if ratio[k] > _UNTOLD:
            texts.append("nothing beyond what was stated" if unknown.stated
                         else "nothing beyond the usual")
            continue
        share = np.array([w * max(a.information[k, k], 0.0)
                          for w, a in zip(joint.weights, joint.answers, strict=True)])
        if unknown.key.endswith(".gain_V_m"):
            texts.append(_by_handle(joint, share))
        else:
            texts.append(_by_pulse(joint, share))
    return texts


def _by_pulse(joint, share):
    """Return which pulses carry the information."""
    total = share.sum()
    if not total > 0.0:
        return "what is known of the others"
    share = share / total
    order = np.argsort(-share)
    half = int(np.searchsorted(np.cumsum(share[order]), 0.5)) + 1
    if half > _MOST:
        return f"all; half of it from {half} of {share.size} pulses"
    names = ", ".join(joint.answers[i].name for i in order[:half])
    return f"half of it from {names}"


def _by_handle(joint, share):
    """Return which handles on the number fix a gain."""
    parts = {"extinction": 0.0, "depletion": 0.0}
    for weight, one in zip(joint.weights, joint.answers, strict=True):
        for part, handle in (("extinction", "transmission"), ("depletion", "depletion")):
            sigma = one.handles.get(handle)
            if sigma:
                parts[part] += weight / sigma**2
    total = sum(parts.values())
    text = " and ".join(f"{name} {100.0 * value / total:.0f} %" for name, value in parts.items()
                        if value > _LEAST_SHARE * total) if total else ""
    by = _by_pulse(joint, share)
    return f"number by {text}; {by}" if text else by


def not_separated(joint, unknowns):
    """Return pairs of unknowns that cannot be told apart, and what is known of them together.

    Parameters
    ----------
    joint : Joint
        The estimate.
    unknowns : sequence of Unknown
        What is shared.

    Returns
    -------
    pairs : tuple of Pair
        With a correlation beyond 0.9, the strongest first.
    """
    sigma = np.sqrt(np.diag(joint.covariance))
    slopes = np.array([in_unit(u.key, u.sigma_at(float(x), 1.0)) for u, x in
                       zip(unknowns, joint.x, strict=True)])
    slopes *= [-1.0 if u.kind.way == "inverse" else 1.0 for u in unknowns]
    found = []
    for i, first in enumerate(unknowns):
        for j in range(i):
            rho = float(joint.covariance[i, j] / (sigma[i] * sigma[j]))
            if abs(rho) > _ENTANGLED:
                width = abs(slopes[i]) * sigma[i]
                signed = rho * np.sign(slopes[i] * slopes[j])
                found.append(Pair(
                    first.label, unknowns[j].label, float(signed),
                    float(signed * width / (abs(slopes[j]) * sigma[j])),
                    float(width * np.sqrt(max(1.0 - rho**2, 0.0))), unit_of(first.key),
                ))
    return tuple(sorted(found, key=lambda pair: -abs(pair.correlation)))


def accommodation_notes(joint, unknowns):
    """Return whether a series tells mass and thermal accommodation apart, where it seeks both.

    Parameters
    ----------
    joint : Joint
        The estimate.
    unknowns : sequence of Unknown
        What is shared.

    Returns
    -------
    notes : list of str
        One, or none.
    """
    keys = [u.key for u in unknowns]
    pair = ("vapour.mass_accommodation", "vapour.thermal_accommodation")
    if not all(key in keys and unknowns[keys.index(key)].written for key in pair):
        return []
    i, j = (keys.index(key) for key in pair)
    sigma = np.sqrt(np.diag(joint.covariance))
    rho = float(joint.covariance[i, j] / (sigma[i] * sigma[j]))
    ratio = max(sigma[k] / np.sqrt(joint.before[k, k]) for k in (i, j))
    apart = abs(rho) < _ENTANGLED and ratio < _UNTOLD
    text = f"mass and thermal accommodation: errors correlate by {rho:.2f}; "
    return [text + ("these pulses tell them apart" if apart else (
        "these pulses cannot separate them: hold one (--hold), or add pulses at a lower pressure "
        "or in a gas that conducts heat otherwise"))]
