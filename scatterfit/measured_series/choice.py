"""Which unknowns the pulses of a bench share, and what is known of them beforehand."""

from dataclasses import dataclass

import numpy as np

from scatterfit.apparatus.correlations import correlation_block
from scatterfit.apparatus.overrides import known_paths
from scatterfit.apparatus.values import suggestion
from scatterfit.errors import InvalidInputError
from scatterfit.measured_series.placing import stands_for, value_in
from scatterfit.measured_series.unknowns import (
    BEND,
    DEPLETION,
    KINDS,
    SCALE,
    Unknown,
    coordinate_of,
    kind_of,
    stated_keys,
)

_STICKING = 0.7
_MASS = "vapour.mass_accommodation"


@dataclass(frozen=True)
class Choice:
    """What is shared."""

    keys: dict
    """Key path to the standard uncertainty of the value, or ``None`` for the usual one [SI]."""
    held: tuple = ()
    """Key paths that were to be shared but for ``hold``."""


def chosen(apparatus, free=(), hold=()):
    """Return what is shared.

    It is what the chamber file states with a sigma, gains it leaves open, and what is freed by
    hand, less what is held.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    free, hold : sequence of str
        Key paths.

    Returns
    -------
    choice : Choice
        Key paths with sigmas.

    Raises
    ------
    InvalidInputError
        If a key path cannot be shared, stands in both lists, or nothing is left to be learnt.
    """
    for key in (*free, *hold):
        _check(apparatus, key)
    both = set(free) & set(hold)
    if both:
        message = f"{min(both)} cannot be both free and held"
        raise InvalidInputError(message)
    keys = {key: apparatus.sigmas[key] for key in stated_keys(apparatus)}
    for detector in apparatus.detectors:
        if detector.gain is None:
            keys[f"detector.{detector.column}.gain_V_m"] = None
    keys |= {key: apparatus.sigmas.get(key) for key in free}
    left = {key: sigma for key, sigma in keys.items() if key not in hold}
    if not left:
        message = (
            "nothing to learn: the chamber file states no sigma of anything that pulses share; "
            "give one, such as detector gain_V_m_sigma, or --free KEY (such as --free "
            "chamber.temperature_K)"
        )
        raise InvalidInputError(message)
    return Choice(left, tuple(key for key in keys if key in hold))


def _check(apparatus, key):
    """Refuse a key path that cannot be shared."""
    if kind_of(key) is None or key in (BEND, DEPLETION):
        columns = [d.column for d in apparatus.detectors]
        known = [path for path in known_paths(columns) if kind_of(path) is not None]
        match = suggestion(key, known)
        message = f"{key}: not a key that pulses share; {match}"
        raise InvalidInputError(message)
    if stands_for(apparatus, key) is None and not key.endswith(".gain_V_m"):
        message = f"{key}: the chamber file does not state it; give a value to start from"
        raise InvalidInputError(message)
    if key.startswith("detector.") and key.split(".")[1] not in {
            d.column for d in apparatus.detectors}:
        message = f"{key}: no detector of this bench fills that column"
        raise InvalidInputError(message)


def sigmas_of(apparatus, choice):
    """Return the standard uncertainty of each shared value, the usual one where none is stated.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    choice : Choice
        What is shared.

    Returns
    -------
    sigmas : dict of str to float
        Key path to standard uncertainty of the value [SI].
    """
    found = {}
    for key, sigma in choice.keys.items():
        value = stands_for(apparatus, key)
        kind = kind_of(key)
        slope = {"factor": value or 1.0, "shift": 1.0, "inverse": (value or 1.0) ** 2}[kind.way]
        found[key] = sigma if sigma is not None else abs(kind.sigma * slope)
    return found


def unknowns_of(apparatus, choice, warms, gains):
    """Return the shared unknowns, common errors of the model last.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    choice : Choice
        What is shared.
    warms : sequence of Warm
        Pulses that take part.
    gains : dict of str to float
        Column to where its gain starts, for detectors without one [V m].

    Returns
    -------
    unknowns : tuple of Unknown
        In the order of the chamber file's keys.
    """
    sigmas = sigmas_of(apparatus, choice)
    found = []
    for key, sigma in choice.keys.items():
        if key == SCALE:
            continue
        kind, value = kind_of(key), stands_for(apparatus, key)
        value = gains.get(key) if value is None else value
        if value is None:
            continue
        stated = sigma is not None
        width = coordinate_of(kind, value, sigmas[key]) if stated else kind.sigma
        found.append(Unknown(key, kind, value, width, stated, written=True))
    found.append(_growth_scale(apparatus, choice, warms))
    found.append(Unknown(BEND, KINDS[BEND], 0.0, KINDS[BEND].sigma, False, False))
    depletion = float(np.median([w.depletion_sigma for w in warms]))
    found.append(Unknown(DEPLETION, KINDS[DEPLETION], 1.0, depletion, False, False))
    if _MASS not in choice.keys and _MASS not in choice.held:
        value = value_in(apparatus, _MASS)
        found.append(Unknown(_MASS, KINDS[_MASS], value, _STICKING / value, False, False))
    return tuple(found)


def _growth_scale(apparatus, choice, warms):
    """Return the common growth scale, by default as sure as the properties are."""
    value = apparatus.analysis.growth_scale
    stated = choice.keys.get(SCALE)
    sigma = float(np.median([w.scale_sigma for w in warms]))
    if stated is not None:
        sigma = coordinate_of(KINDS[SCALE], value, stated)
    return Unknown(SCALE, KINDS[SCALE], value, sigma, stated is not None, written=True)


def before_of(apparatus, unknowns):
    """Return the covariance of the coordinates beforehand.

    Parameters
    ----------
    apparatus : Apparatus
        With its stated correlations.
    unknowns : sequence of Unknown
        What is shared.

    Returns
    -------
    covariance : ndarray, shape (k, k)
        Of the coordinates [SI].
    """
    sigma = np.array([u.sigma for u in unknowns])
    # One over a coefficient moves against the coefficient itself.
    sign = np.array([-1.0 if u.kind.way == "inverse" else 1.0 for u in unknowns])
    block = np.array(correlation_block(apparatus, [u.key if u.stated else "" for u in unknowns]))
    block[np.arange(sigma.size), np.arange(sigma.size)] = 1.0
    unstated = [not u.stated for u in unknowns]
    block[np.ix_(unstated, unstated)] = np.eye(sum(unstated))
    block = 0.999 * block + 0.001 * np.eye(sigma.size)
    return block * np.outer(sign * sigma, sign * sigma)
