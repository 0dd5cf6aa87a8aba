"""Which pulses belong together: isotherms, and series at one supersaturation."""

import numpy as np

from scatterfit.errors import InvalidInputError

TEMPERATURE_RESOLUTION = 0.1
"""Scatter of temperature below which pulses count as equally cold [K]."""
LOG_RATIO_RESOLUTION = 0.01
"""Scatter of ln S below which pulses count as equally supersaturated [-]."""

_MOST_CELLS = 300
_PENALTY = 3.0  # free numbers of a group: its centre, width and share


def isotherms(temperature, tolerance=None):
    """Sort pulses into isotherms.

    Parameters
    ----------
    temperature : array_like, shape (n,)
        Nucleation temperature of each pulse [K].
    tolerance : float, optional
        Largest distance of a pulse from the middle of its isotherm [K]; found from the data when
        absent.

    Returns
    -------
    groups : list of ndarray, each of shape (m,)
        Indices of the pulses of each isotherm, the warmest first [-].

    Raises
    ------
    InvalidInputError
        If the tolerance is not positive.

    Examples
    --------
    >>> [len(group) for group in isotherms([250.1, 240.0, 249.9, 250.0, 240.1, 240.2])]
    [3, 3]
    >>> len(isotherms([250.1, 249.9, 240.0], tolerance=0.05))
    3
    """
    temperature = np.asarray(temperature, dtype=float)
    if tolerance is None:
        groups = natural_groups(temperature, TEMPERATURE_RESOLUTION)
    elif tolerance > 0:
        groups = _within(temperature, tolerance)
    else:
        message = f"the tolerance of an isotherm must be positive, but it is {tolerance:g} K"
        raise InvalidInputError(message)
    return [np.sort(group) for group in groups[::-1]]


def _within(values, tolerance):
    """Return the fewest groups no wider than twice the tolerance, in ascending order."""
    order = np.argsort(values, kind="stable")
    rising = values[order]
    limit = 2.0 * tolerance * (1.0 + 1e-12)
    edges, start = [], 0
    while start < rising.size:
        edges.append(start)
        start = int(np.searchsorted(rising, rising[start] + limit, side="right"))
    return np.split(order, edges[1:]) if rising.size else []


def natural_groups(values, resolution):
    r"""Split numbers into the groups that a mixture of normal distributions would have.

    Of all ways to cut the sorted numbers, the one with the largest classification likelihood,
    less a penalty for each group (Schwarz 1978), found by dynamic programming (Fisher 1958):

    .. math:: \min \sum_g n_g \ln(s_g^2 + \delta^2) - 2 n_g \ln(n_g / n) + 3 \ln n

    Parameters
    ----------
    values : array_like, shape (n,)
        The numbers [any unit].
    resolution : float
        Width :math:`\delta` below which a group is not resolved [unit of the values].

    Returns
    -------
    groups : list of ndarray, each of shape (m,)
        Indices of the members of each group, ascending in value [-].

    Notes
    -----
    The middle of a normal or uniform distribution is never worth a cut: the gain of a narrower
    group is the cost of its smaller share. Groups are told apart from a distance of about four
    standard deviations.

    References
    ----------
    .. [1] W. D. Fisher, "On grouping for maximum homogeneity", J. Am. Stat. Assoc. 53 (1958)
       789-798. doi:10.1080/01621459.1958.10501479
    .. [2] G. Celeux, G. Govaert, "A classification EM algorithm for clustering and two stochastic
       versions", Comput. Stat. Data Anal. 14 (1992) 315-332. doi:10.1016/0167-9473(92)90042-E
    .. [3] G. Schwarz, "Estimating the dimension of a model", Ann. Stat. 6 (1978) 461-464.
       doi:10.1214/aos/1176344136

    Examples
    --------
    >>> [group.tolist() for group in natural_groups([1.0, 5.0, 1.1, 5.1, 0.9, 4.9], 0.1)]
    [[4, 0, 2], [5, 1, 3]]
    """
    values = np.asarray(values, dtype=float)
    order = np.argsort(values, kind="stable")
    if values.size == 0:
        return []
    rising = values[order] - values[order].mean()
    cells = _cells(rising)
    last = np.r_[np.flatnonzero(np.diff(cells)), cells.size - 1]  # last member of each cell
    sums = [np.r_[0.0, np.cumsum(rising**power)[last]] for power in (0, 1, 2)]
    starts = _best_cuts(_group_costs(sums, resolution, values.size))
    return np.split(order, (last[np.array(starts[1:], dtype=int) - 1] + 1))


def _cells(rising):
    """Return the cell each sorted number falls in: its own, or one of a few hundred."""
    distinct = np.r_[0, np.cumsum(np.diff(rising) > 0)]
    if distinct[-1] < _MOST_CELLS:
        return distinct
    width = (rising[-1] - rising[0]) / _MOST_CELLS
    cells = np.minimum((rising - rising[0]) / width, _MOST_CELLS - 1).astype(int)
    return np.r_[0, np.cumsum(np.diff(cells) > 0)]


def _group_costs(sums, resolution, total):
    """Return the cost of a group from cell i up to, but without, cell j; infinite for j <= i."""
    counts, first, second = (part[None, :] - part[:, None] for part in sums)
    filled = np.triu(np.ones(counts.shape, dtype=bool), 1)
    counts = np.where(filled, counts, 1.0)
    variance = np.maximum(second - first**2 / counts, 0.0) / counts
    cost = counts * (np.log(np.where(filled, variance, 1.0) + resolution**2)
                     - 2.0 * np.log(counts / total))
    return np.where(filled, cost + _PENALTY * np.log(total), np.inf)


def _best_cuts(costs):
    """Return the first cell of each group of the cheapest way to cut."""
    best, back = [0.0], [0]
    for end in range(1, len(costs)):
        through = np.asarray(best) + costs[:end, end]
        back.append(int(np.argmin(through)))
        best.append(float(through[back[-1]]))
    starts, end = [], len(costs) - 1
    while end > 0:
        end = back[end]
        starts.append(end)
    return starts[::-1]
