"""Which settings of a bench are best: how they are judged, and a search within limits."""

import numpy as np

from scatterfit.measured_pulse.plan import by_factors, outcome

_CLOSER = 0.87

QUANTITIES = ("final_radius", "growth_rate", "concentration", "nucleation_rate")
"""What settings are judged by."""


def quantity_of(expectation, name):
    """Return one of the quantities that settings are judged by, or ``None``.

    Parameters
    ----------
    expectation : Expectation
        Of a setting.
    name : str
        One of ``QUANTITIES``.

    Returns
    -------
    quantity : Quantity or None
        ``None`` where the light does not determine it.
    """
    pulse = expectation.pulse
    return pulse.nucleation.rate if name == "nucleation_rate" else getattr(pulse, name)


def merit(found, wanted):
    """Return how good a setting is; the least is the best.

    Parameters
    ----------
    found : Outcome
        A setting.
    wanted : sequence of str
        Of ``QUANTITIES``.

    Returns
    -------
    merit : tuple of float
        How far its verdict is from ``accepted``, then the mean of ln(sigma/value) over what is
        wanted; what is not determined counts as a sigma of ten times the value [-].

    Notes
    -----
    The mean of logarithms is that of the product of the relative sigmas: halving any of them is
    worth the same.
    """
    if found.expectation is None:
        return (9.0, 0.0)
    place = {"accepted": 0.0, "ambiguous": 1.0}.get(found.expectation.pulse.verdict, 2.0)
    quantities = [quantity_of(found.expectation, name) for name in wanted]
    logs = [np.log(10.0) if q is None else np.log(q.sigma / q.value) for q in quantities]
    return (place, float(np.mean(logs)))


def search_best(paper, limits, wanted, tries, tell=lambda _: None):
    """Return settings tried within limits, best first.

    Half of them are spread evenly over the box (Halton's points), the others about the best one
    so far, ever closer.

    Parameters
    ----------
    paper : Paper
        The bench as it stands.
    limits : mapping of str to tuple of float
        Key to least and largest value, in the unit of the key.
    wanted : sequence of str
        Of ``QUANTITIES``.
    tries : int
        How many settings.
    tell : callable
        Called with each outcome.

    Returns
    -------
    outcomes : list of Outcome
        Best first.

    References
    ----------
    .. [1] J. H. Halton, "On the efficiency of certain quasi-random sequences of points in
       evaluating multi-dimensional integrals", Numer. Math. 2 (1960) 84-90.
    """
    ends = np.array(list(limits.values()), dtype=float)
    factors = np.array([by_factors(low, high) for low, high in ends])
    box = np.where(factors[:, None], np.log(np.maximum(ends, 1e-300)), ends)
    points = halton(tries, len(limits))
    spread = max(tries // 2, 1)
    found, best, centre = [], None, None
    for i, point in enumerate(points):
        place = point if i < spread else np.clip(
            centre + _CLOSER ** (i - spread) * (point - 0.5), 0.0, 1.0)
        values = box[:, 0] + place * (box[:, 1] - box[:, 0])
        values = np.where(factors, np.exp(values), values)
        one = outcome(paper, {key: float(f"{value:.4g}")
                              for key, value in zip(limits, values, strict=True)})
        tell(one)
        found.append(one)
        if best is None or merit(one, wanted) < merit(best, wanted):
            best, centre = one, place
    return sorted(found, key=lambda one: merit(one, wanted))


def halton(count, dimensions):
    """Return points spread evenly over the unit cube.

    Parameters
    ----------
    count : int
        How many.
    dimensions : int
        At most 10.

    Returns
    -------
    points : ndarray, shape (count, dimensions)
        In 0 to 1 [-].

    Examples
    --------
    >>> halton(3, 2).round(3).tolist()
    [[0.5, 0.333], [0.25, 0.667], [0.75, 0.111]]
    """
    bases = (2, 3, 5, 7, 11, 13, 17, 19, 23, 29)[:dimensions]
    points = np.zeros((count, len(bases)))
    for column, base in enumerate(bases):
        for row in range(count):
            left, digit = row + 1, 1.0 / base
            while left:
                points[row, column] += digit * (left % base)
                left, digit = left // base, digit / base
    return points
