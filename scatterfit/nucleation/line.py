"""A straight line through points with errors in both coordinates, and what lies off it."""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.nucleation.quantiles import (
    chi_square_quantile,
    normal_quantile,
    student_quantile,
)

INTERVAL = 0.95
"""Probability of every interval that is quoted."""

_HUBER = 1.345  # 95 percent efficient on normal errors (Huber 1981)
_OUTLIER = 3.5  # modified z-score of Iglewicz and Hoaglin 1993
_TO_SIGMA = 1.4826  # median absolute deviation of a normal distribution to its sigma
_FEWEST_FOR_OUTLIERS = 5
_ROUNDS = 200
_HALVINGS = 12
_TURNS = 2
_FLOOR = 1e-24  # variance of ln J far below anything measured, which keeps weights finite


@dataclass(frozen=True)
class Points:
    """Points with independent errors; variances of zero are those that nobody stated."""

    x: np.ndarray
    """Shape (n,) [-]."""
    y: np.ndarray
    """Shape (n,) [-]."""
    variance_x: np.ndarray
    """Shape (n,) [-]."""
    variance_y: np.ndarray
    """Shape (n,) [-]."""
    covariance: np.ndarray
    """Of the errors of x and y, shape (n,) [-]."""

    @property
    def stated(self):
        """Whether any point has an error of its own."""
        return bool(self.variance_x.any() or self.variance_y.any())

    def variance(self, slope):
        """Return the variance of the distance y - slope x, shape (n,) [-]."""
        total = self.variance_y + slope**2 * self.variance_x - 2.0 * slope * self.covariance
        return np.maximum(total, 0.0)

    def reduced(self, own_x, own):
        """Return the points with a part of the variance of x, and then of both, alone."""
        return Points(self.x, self.y, own * own_x * self.variance_x, own * self.variance_y,
                      own * np.sqrt(own_x) * self.covariance)


@dataclass(frozen=True)
class Line:
    """A fitted line, y = level + slope (x - centre)."""

    centre: float
    level: float
    slope: float
    covariance: np.ndarray
    """Of level and slope, shape (2, 2) [-]; not finite where the data do not give it."""
    scatter: float
    """Standard deviation of y beyond the stated errors [-]."""
    freedom: float
    """Degrees of freedom of the interval; infinite where stated errors alone make it [-]."""
    chi2_reduced: float
    """Misfit in units of the stated errors, squared, per degree of freedom [-]."""
    own_x: float = 1.0
    """Part of the stated variance of x that single points have for themselves [-]."""
    own: float = 1.0
    """Part of all stated variance that they have [-]."""

    @property
    def overstated(self):
        """Whether the points scatter significantly less than the stated errors say."""
        return self.own_x < 1.0 or self.own < 1.0

    @property
    def slope_sigma(self):
        """Standard uncertainty of the slope [-]."""
        return float(np.sqrt(self.covariance[1, 1]))

    @property
    def interval_factor(self):
        """Half width of the 95 percent interval over the standard uncertainty [-]."""
        return student_quantile(0.5 + INTERVAL / 2, self.freedom)

    def at(self, x):
        """Return y on the line, shape of x [-]."""
        return self.level + self.slope * (np.asarray(x) - self.centre)

    def sigma_at(self, x):
        """Return the standard uncertainty of y on the line, shape of x [-]."""
        step = np.asarray(x) - self.centre
        (level, both), (_, slope) = self.covariance
        return np.sqrt(np.maximum(level + 2.0 * both * step + slope * step**2, 0.0))

    def solve(self, y):
        """Return where the line reaches y, and the standard uncertainty of that place [-]."""
        x = self.centre + (y - self.level) / self.slope
        return x, float(self.sigma_at(x)) / abs(self.slope)


def fit_line(points, *, extra=True):
    r"""Fit a straight line, with errors in both coordinates where they are stated.

    The line that minimises :math:`\sum_i (y_i - a - b x_i)^2 / w_i` with
    :math:`w_i = \sigma_{y,i}^2 + b^2 \sigma_{x,i}^2 - 2 b \sigma_{xy,i} + \tau^2` (York et al.
    2004), where the scatter :math:`\tau` beyond the stated errors is the one at which the sum is
    its expectation n - 2, or zero (Paule and Mandel 1982). Without stated errors this is ordinary
    least squares of y on x.

    Parameters
    ----------
    points : Points
        What was measured.
    extra : bool
        Whether scatter beyond the stated errors is allowed for.

    Returns
    -------
    line : Line or None
        The line; ``None`` where there are not two different x.

    Notes
    -----
    Where the points scatter less than the stated errors say (beyond what happens in 2.5 percent
    of cases), a part of the errors is shared by all points and does not bend the line. In an
    expansion that is first of all the error of S, which hangs on one temperature: the variance of
    x is reduced until chi-square is its expectation, and if that is not enough, all of it.

    References
    ----------
    .. [1] D. York, N. M. Evensen, M. Lopez Martinez, J. De Basabe Delgado, "Unified equations for
       the slope, intercept, and standard errors of the best straight line", Am. J. Phys. 72
       (2004) 367-375. doi:10.1119/1.1632486
    .. [2] R. C. Paule, J. Mandel, "Consensus values and weighting factors", J. Res. Natl. Bur.
       Stand. 87 (1982) 377-385. doi:10.6028/jres.087.022

    Examples
    --------
    >>> x, y, none = np.array([0.0, 1.0, 2.0]), np.array([0.0, 1.0, 5.0]), np.zeros(3)
    >>> line = fit_line(Points(x, y, none, none, none))
    >>> line.slope, line.slope_sigma
    (2.5, 0.866)
    """
    if points.x.size < 2 or np.ptp(points.x) <= 1e-12 * max(1.0, float(np.abs(points.x).max())):
        return None
    line = _fitted(points, extra=extra)
    freedom = points.x.size - 2
    if not extra or freedom < 1 or line.scatter > 0 or \
            line.chi2_reduced * freedom >= chi_square_quantile(0.025, freedom):
        return line
    reduced = line
    for _ in range(_TURNS):  # the slope hardly depends on the part, nor the part on the slope
        own_x = _own_part(points, reduced.slope)
        reduced = _fitted(points.reduced(own_x, 1.0), extra=True)
    own = 1.0 if own_x > 0 else max(reduced.chi2_reduced, 1e-12) if reduced.scatter == 0 else 1.0
    return replace(reduced, covariance=own * reduced.covariance, own_x=own_x, own=own,
                   chi2_reduced=line.chi2_reduced, freedom=freedom)


def _own_part(points, slope):
    """Return the part of the variance of x at which chi-square is its expectation."""
    low, high = 0.0, 1.0
    for _ in range(_HALVINGS):
        middle = 0.5 * (low + high)
        weights = _weights(points.reduced(middle, 1.0), slope, 0.0)
        misfit = float(weights @ _residuals(points, slope, weights) ** 2)
        low, high = (low, middle) if misfit < points.x.size - 2 else (middle, high)
    return low


def _fitted(points, *, extra):
    slope = _slope(points, np.ones_like(points.x), 0.0)
    scatter2 = 0.0
    for _ in range(_ROUNDS):
        scatter2 = extra_variance(points, slope) if extra else 0.0
        new = _slope(points, _weights(points, slope, scatter2), slope)
        done = abs(new - slope) <= 1e-12 * abs(new)
        slope = new
        if done:
            break
    return _line(points, slope, scatter2)


def _weights(points, slope, scatter2):
    return 1.0 / (points.variance(slope) + scatter2 + _FLOOR)


def _adjusted(points, weights, slope):
    """Return each point's x moved to the line, from the weighted mean; and both means [-]."""
    total = weights.sum()
    mean_x, mean_y = weights @ points.x / total, weights @ points.y / total
    u, v = points.x - mean_x, points.y - mean_y
    # Eq. 13b of York et al., where the variance of y beyond b x is all that 1/weights leaves.
    free = 1.0 / weights - slope**2 * points.variance_x + 2.0 * slope * points.covariance
    moved = weights * (u * free + slope * v * points.variance_x
                       - (slope * u + v) * points.covariance)
    return moved, mean_x, mean_y, v


def _slope(points, weights, slope):
    if not points.stated:
        weights = np.ones_like(points.x)
    moved, _, _, v = _adjusted(points, weights, slope)
    u = points.x - weights @ points.x / weights.sum()
    return float((weights * moved) @ v / ((weights * moved) @ u))


def _residuals(points, slope, weights):
    offset = points.y - slope * points.x
    return offset - weights @ offset / weights.sum()


def chi_square_limit(line, count):
    """Return the reduced chi-square that chance exceeds in 2.5 percent of cases.

    Parameters
    ----------
    line : Line
        A fitted line.
    count : int
        Points that it was fitted to.

    Returns
    -------
    limit : float
        Infinite where there is no chi-square [-].
    """
    freedom = count - 2
    if freedom < 1 or not np.isfinite(line.chi2_reduced):
        return np.inf
    return chi_square_quantile(0.975, freedom) / freedom


def extra_variance(points, slope):
    """Return the variance beyond the stated errors at which chi-square is its expectation.

    Parameters
    ----------
    points : Points
        What was measured.
    slope : float
        Slope of the line [-].

    Returns
    -------
    variance : float
        Of y, at least zero [-].
    """
    freedom = points.x.size - 2
    if freedom < 1:
        return 0.0
    stated = points.variance(slope) + _FLOOR
    plain = _residuals(points, slope, np.ones_like(points.x))
    if not points.stated:
        return float(plain @ plain) / freedom
    extra = max(0.0, float(plain @ plain) / freedom - float(stated.max()))
    for _ in range(_ROUNDS):
        weights = 1.0 / (stated + extra)
        squares = weights * _residuals(points, slope, weights) ** 2
        excess = squares.sum() - freedom
        step = excess / max(float(weights @ squares), 1e-300)
        extra = max(0.0, extra + step)
        if abs(step) <= 1e-12 * extra or (extra == 0.0 and excess <= 0):
            break
    return float(extra)


def _line(points, slope, scatter2):
    weights = _weights(points, slope, scatter2)
    moved, mean_x, mean_y, _ = _adjusted(points, weights, slope)
    shift = weights @ moved / weights.sum()
    u = moved - shift
    centre = float(mean_x + shift)
    level = float(mean_y + slope * shift)
    covariance = np.diag([1.0 / weights.sum(), 1.0 / float(weights @ u**2)])
    freedom, stated = points.x.size - 2, points.stated
    chi2 = np.nan
    if stated and freedom > 0:
        plain = _weights(points, slope, 0.0)
        chi2 = float(plain @ _residuals(points, slope, plain) ** 2) / freedom
    elif not stated and freedom < 1:
        covariance = np.full((2, 2), np.nan)
    by_scatter = freedom >= 1 and (not stated or scatter2 > 0)
    return Line(centre, level, slope, covariance, float(np.sqrt(scatter2)),
                freedom if by_scatter else np.inf, chi2)


def robust_line(points, line):
    """Fit a line on which single points have little hold.

    Huber's estimate, by least squares with weights that fall off beyond 1.345 standard
    deviations; the standard deviation is the median absolute deviation of the residuals.

    Parameters
    ----------
    points : Points
        What was measured.
    line : Line
        The least-squares line, where the search starts and whose weights are kept.

    Returns
    -------
    robust : Line or None
        The line; ``None`` with fewer than three points.
    score : ndarray, shape (n,)
        Distance of each point from it in robust standard deviations [-].

    References
    ----------
    .. [1] P. J. Huber, Robust Statistics, Wiley 1981, sections 6.7 and 7.

    Examples
    --------
    >>> x, none = np.arange(9.0), np.zeros(9)
    >>> y = 2 * x + np.array([0.1, -0.1, 0.1, -0.1, 0.1, -0.1, 0.1, -0.1, 30.0])
    >>> points = Points(x, y, none, none, none)
    >>> line = fit_line(points)
    >>> round(line.slope, 1), round(robust_line(points, line)[0].slope, 1)
    (4.0, 2.0)
    """
    count = points.x.size
    if count < 3:
        return None, np.zeros(count)
    reduced = points.reduced(line.own_x, line.own)
    weights = _weights(reduced, line.slope, line.scatter**2)
    root = np.sqrt(weights)
    design = np.stack([root, root * (points.x - line.centre)], axis=1)
    target = root * points.y
    both = np.array([line.level, line.slope])
    for _ in range(_ROUNDS):
        residual = target - design @ both
        scale = _scale(residual)
        hold = np.minimum(1.0, _HUBER * scale / np.maximum(np.abs(residual), 1e-300))
        normal = design.T @ (hold[:, None] * design)
        new = np.linalg.lstsq(normal, design.T @ (hold * target), rcond=None)[0]
        done = np.all(np.abs(new - both) <= 1e-10 * (1e-3 + np.abs(new)))
        both = new
        if done:
            break
    residual = target - design @ both
    scale = _scale(residual)
    inside = np.abs(residual) <= _HUBER * scale
    clipped = np.clip(residual, -_HUBER * scale, _HUBER * scale)
    variance = float(clipped @ clipped) / (count - 2) / max(float(inside.mean()), 1e-3) ** 2
    covariance = variance * np.linalg.pinv(design.T @ design)
    robust = replace(line, level=float(both[0]), slope=float(both[1]), covariance=covariance,
                     freedom=count - 2)
    return robust, residual / scale


def _scale(residual):
    """Return the standard deviation of residuals of a line by their median size."""
    count = residual.size
    middle = float(np.median(np.abs(residual))) * _TO_SIGMA * np.sqrt(count / (count - 2))
    return max(middle, 1e-10 * float(np.sqrt(np.mean(residual**2))), 1e-300)


def outliers(score):
    """Return which points lie too far from the robust line to be chance.

    Parameters
    ----------
    score : ndarray, shape (n,)
        Distance from the robust line in robust standard deviations [-].

    Returns
    -------
    far : ndarray, shape (n,)
        Whether each point is an outlier [bool]; none where there are fewer than five.

    Notes
    -----
    The limit is 3.5 (Iglewicz and Hoaglin 1993), and more for many points: the distance that one
    of all would exceed with 5 percent probability if errors were normal.

    References
    ----------
    .. [1] B. Iglewicz, D. C. Hoaglin, How to Detect and Handle Outliers, ASQC Quality Press 1993.

    Examples
    --------
    >>> outliers(np.array([0.1, -1.2, 0.7, 6.0, -0.4])).tolist()
    [False, False, False, True, False]
    """
    count = score.size
    if count < _FEWEST_FOR_OUTLIERS:
        return np.zeros(count, dtype=bool)
    return np.abs(score) > max(_OUTLIER, normal_quantile(1.0 - 0.025 / count))
