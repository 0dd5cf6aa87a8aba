"""Which directions a detector collects: quadrature over its circular cone.

A detector looks from its axis in the scattering plane of the bench. A direction out of that plane
has a scattering plane of its own, turned about the beam by the azimuth phi, so that light
polarized at psi from the bench's plane is seen there as polarized at psi - phi: the weights of
|S1|^2 and |S2|^2 differ. The azimuth integral over the chord of the cone is done in closed form,
the one over the scattering angle by Gauss quadrature.
"""

from dataclasses import dataclass

import numpy as np

from scatterfit.errors import InvalidInputError

_EXTRA_NODES = 6


@dataclass(frozen=True)
class ConeQuadrature:
    """Scattering angles and weights of a cone.

    The collected light is sum(perpendicular |S1|^2 + parallel |S2|^2) / k^2, in m^2.
    """

    angle: np.ndarray
    """Scattering angles, shape (n_nodes,) [rad]."""
    perpendicular: np.ndarray
    """Weights of |S1|^2, shape (n_nodes,) [sr]."""
    parallel: np.ndarray
    """Weights of |S2|^2, shape (n_nodes,) [sr]."""


def cone_quadrature(
    angle: float, half_angle: float, polarization: float | None, max_size_parameter: float
) -> ConeQuadrature:
    """Return the quadrature over a detector's cone.

    Parameters
    ----------
    angle : float
        Scattering angle of the cone's axis, 0 is forward [rad].
    half_angle : float
        Half angle of the cone, in (0, pi/2) [rad].
    polarization : float or None
        Angle of the electric field from the scattering plane of the axis [rad]; ``None`` is
        unpolarized.
    max_size_parameter : float
        Largest size parameter that the quadrature must serve [-].

    Returns
    -------
    quadrature : ConeQuadrature
        Exact to better than 1e-6 of the collected light up to the largest size.

    Raises
    ------
    InvalidInputError
        If the half angle is out of range.

    Notes
    -----
    At scattering angle theta the chord of the cone spans azimuths -Phi to Phi with
    cos(Phi) = (cos(alpha) - cos(theta) cos(Theta)) / (sin(theta) sin(Theta)). Integrating
    sin^2(psi - phi) and cos^2(psi - phi) over it gives Phi -+ cos(2 psi) sin(2 Phi) / 2. Phi rises
    from the rim like a square root, which the Gauss-Chebyshev rule of the second kind takes
    exactly. Where the cone contains the beam's axis (or its opposite) or comes near it, the full
    rings about it are a Gauss-Legendre piece of their own, and the rest takes the Gauss-Legendre
    rule in t with theta = centre - width cos(t), which is smooth at both rims.

    Examples
    --------
    The weights add up to the cone's solid angle, 2 pi (1 - cos(alpha)):

    >>> cone = cone_quadrature(np.radians(30.0), np.radians(1.0), None, 100.0)
    >>> solid_angle = 2 * np.pi * (1 - np.cos(np.radians(1.0)))
    >>> float(np.sum(cone.perpendicular + cone.parallel) / solid_angle)
    1.0000000
    """
    if not 0 < half_angle < np.pi / 2:
        message = (
            f"half angle of the cone is {half_angle:g} rad, must lie between 0 and pi/2; "
            "0.0175 rad is one degree"
        )
        raise InvalidInputError(message)
    axis = float(np.arccos(np.clip(np.cos(angle), -1.0, 1.0)))
    pieces = _pieces(axis, half_angle, max_size_parameter)
    theta, width = (np.concatenate(part) for part in zip(*pieces, strict=True))
    chord = _chord(theta, axis, half_angle)
    turned = 0.0 if polarization is None else np.cos(2 * polarization) * np.sin(2 * chord) / 2
    ring = width * np.sin(theta)
    return ConeQuadrature(theta, ring * (chord - turned), ring * (chord + turned))


def _pieces(axis, half_angle, max_size_parameter):
    """Return (angles, widths) of the chord part and, where there are any, of the full rings."""
    inner, outer = abs(axis - half_angle), min(axis + half_angle, np.pi)
    if axis + half_angle > np.pi:
        outer = 2 * np.pi - axis - half_angle
    pieces = []
    if axis < half_angle:
        pieces.append(_legendre(0.0, inner, max_size_parameter))
    if axis + half_angle > np.pi:
        pieces.append(_legendre(outer, np.pi, max_size_parameter))
    near_axis = min(axis, np.pi - axis) < 2 * half_angle
    if outer - inner > 1e-12:
        rule = _legendre_of_rims if near_axis else _chebyshev
        pieces.append(rule(inner, outer, max_size_parameter))
    return pieces


def _node_count(low, high, max_size_parameter):
    """Return the nodes for 1e-6 or better: the intensity has about x radians of phase a radian."""
    return int(np.ceil(1.15 * (high - low) / 2 * max_size_parameter)) + _EXTRA_NODES


def _chebyshev(low, high, max_size_parameter):
    """Return nodes and plain widths of the Gauss-Chebyshev rule of the second kind."""
    count = _node_count(low, high, max_size_parameter)
    position = np.arange(1, count + 1) * np.pi / (count + 1)
    width = np.pi / (count + 1) * np.sin(position)
    return (low + high) / 2 + (high - low) / 2 * np.cos(position), (high - low) / 2 * width


def _legendre(low, high, max_size_parameter):
    """Return nodes and widths of the Gauss-Legendre rule."""
    position, width = np.polynomial.legendre.leggauss(_node_count(low, high, max_size_parameter))
    return (low + high) / 2 + (high - low) / 2 * position, (high - low) / 2 * width


def _legendre_of_rims(low, high, max_size_parameter):
    """Return nodes and widths of the Gauss-Legendre rule in t, theta = centre - width cos(t)."""
    count = 2 * _node_count(low, high, max_size_parameter) + _EXTRA_NODES
    position, width = np.polynomial.legendre.leggauss(count)
    t = np.pi * (position + 1) / 2
    angle = (low + high) / 2 - (high - low) / 2 * np.cos(t)
    return angle, (high - low) / 2 * np.sin(t) * np.pi / 2 * width


def _chord(theta, axis, half_angle):
    """Return half the azimuth range of the cone at scattering angles theta."""
    across = np.sin(theta) * np.sin(axis)
    along = np.cos(half_angle) - np.cos(theta) * np.cos(axis)
    with np.errstate(divide="ignore", invalid="ignore"):
        cosine = np.where(across > 1e-15, along / across, np.where(along > 0, 1.0, -1.0))
    return np.arccos(np.clip(cosine, -1.0, 1.0))
