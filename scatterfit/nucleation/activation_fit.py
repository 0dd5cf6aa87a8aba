"""Onset and width of activation: a cumulative normal curve through fractions that were counted."""

import math
from dataclasses import dataclass

import numpy as np

from scatterfit.nucleation.quantiles import normal_quantile

_ERFC = np.frompyfunc(math.erfc, 1, 1)
_FEWEST_FOR_TWO = 8
_LEAST_COUNTING = 0.25  # of what Poisson counts have beside their proportional part
_NOISE_TURNS = 8
_SETTLED = 1e-6
_FEW_STEPS, _MANY_STEPS = 8, 60
_SMALLEST_PART = 1e-9
_PLATEAU_SIGMAS = 3.0


@dataclass(frozen=True)
class Fractions:
    """Activated fractions against supersaturation."""

    x: np.ndarray
    """ln S, shape (n,) [-]."""
    fraction: np.ndarray
    """Droplets over seeds at the same gas density, shape (n,) [-]."""
    seeds: np.ndarray
    """Seeds that were in view: how many can have been counted, shape (n,) [-]."""
    counted: bool
    """Whether that is known; otherwise it is known up to a factor, which the scatter gives."""
    sigma: np.ndarray | None
    """Stated standard uncertainty of each fraction, shape (n,) [-]."""
    variance_x: np.ndarray
    """Of ln S, shape (n,) [-]."""
    plateau_sigma: float = 0.0
    """Standard uncertainty of droplets over seeds that all pulses share [-]."""


@dataclass(frozen=True)
class Noise:
    """How fractions scatter: var = counting F (1 - F) / seeds + proportional^2 F^2."""

    counting: float
    """One where every seed in view is counted [-]."""
    proportional: float
    """Relative scatter of seeds and of the number's scale from pulse to pulse [-]."""


@dataclass(frozen=True)
class Curve:
    """A fitted curve, fraction = plateau Phi((ln S - centre) / width)."""

    centre: float
    width: float
    plateau: float
    covariance: np.ndarray
    """Of centre, ln width and plateau, shape (3, 3) [-]."""
    noise: Noise
    freedom: float
    resolved: bool
    """Whether pulses lie on the slope; else the width is not determined."""
    plateau_free: bool
    score: np.ndarray | None = None
    """Distance of each pulse from the curve in its standard deviations, shape (n,) [-]."""

    def at(self, x):
        """Return the fraction at ln S, shape of x [-]."""
        return self.plateau * normal_part((np.asarray(x) - self.centre) / self.width)

    def sigma_at(self, x):
        """Return the standard uncertainty of the curve, shape of x [-]."""
        slopes = _slopes(np.array([self.centre, math.log(self.width), self.plateau]), x)
        return np.sqrt(np.maximum(np.einsum("ni,ij,nj->n", slopes, self.covariance, slopes), 0.0))


def normal_part(z):
    """Return the cumulative standard normal distribution.

    Parameters
    ----------
    z : array_like, shape (n,)
        Where [-].

    Returns
    -------
    part : ndarray, shape (n,)
        Probability below z [-].

    Examples
    --------
    >>> normal_part([0.0, 1.0]).tolist()
    [0.5, 0.8413]
    """
    return 0.5 * _ERFC(-np.asarray(z, dtype=float) / math.sqrt(2.0)).astype(float)


def wilson_interval(fraction, counts, probability=0.6827):
    r"""Return the interval of a fraction that was counted, right near zero and one.

    The score interval: all F for which
    :math:`(f - F)^2 \le z^2 F (1 - F) / n`.

    Parameters
    ----------
    fraction : array_like, shape (n,)
        Observed, between 0 and 1 [-].
    counts : array_like, shape (n,)
        Number of trials, > 0 [-].
    probability : float
        That the interval holds [-].

    Returns
    -------
    low, high : ndarray, shape (n,)
        Ends [-].

    References
    ----------
    .. [1] E. B. Wilson, "Probable inference, the law of succession, and statistical inference",
       J. Am. Stat. Assoc. 22 (1927) 209-212. doi:10.1080/01621459.1927.10502953

    Examples
    --------
    None of ten activated, 95 percent; tables have 0 to 0.278:

    >>> low, high = wilson_interval([0.0], [10], 0.95)
    >>> round(float(low[0]), 3), round(float(high[0]), 3)
    (0.0, 0.278)
    """
    fraction, counts = np.asarray(fraction, dtype=float), np.asarray(counts, dtype=float)
    z2 = normal_quantile(0.5 + probability / 2) ** 2
    middle = fraction + z2 / (2 * counts)
    half = np.sqrt(z2 * (fraction * (1 - fraction) / counts + z2 / (4 * counts**2)))
    below, above = (middle - half), (middle + half)
    return np.maximum(below, 0.0) / (1 + z2 / counts), above / (1 + z2 / counts)


def fit_curve(data, *, free_plateau=None):
    r"""Fit onset and width of activation.

    .. math:: F(S) = A \, \Phi \left( \frac{\ln S - \ln S_{50}}{w} \right)

    by maximum quasi-likelihood: scores weighted with the variance that the curve itself predicts,
    :math:`\phi F (1 - F) / N + p^2 F^2` and the part that errors of S cause. With p = 0 it is the
    likelihood of binomial counts; :math:`\phi = 1, p^2 = 1 / N` that of Poisson counts. Half a
    count is added to either end, so that a pulse with none has an uncertainty. What is not
    stated, :math:`\phi` and p, is found from the residuals.

    Parameters
    ----------
    data : Fractions
        What was measured.
    free_plateau : bool, optional
        Whether A is free. When absent, it is tied to one within its stated uncertainty, and freed
        where the pulses beyond the onset contradict that by three standard deviations.

    Returns
    -------
    curve : Curve or None
        The curve; ``None`` where no pulse is below half activation or none is above.

    References
    ----------
    .. [1] R. W. M. Wedderburn, "Quasi-likelihood functions, generalized linear models, and the
       Gauss-Newton method", Biometrika 61 (1974) 439-447. doi:10.1093/biomet/61.3.439
    .. [2] R. J. Carroll, D. Ruppert, Transformation and Weighting in Regression, Chapman and Hall
       1988, chapter 3.

    Examples
    --------
    >>> x = np.linspace(0.1, 0.3, 21)
    >>> exact = normal_part((x - 0.2) / 0.03)
    >>> none = np.zeros(21)
    >>> curve = fit_curve(Fractions(x, exact, np.full(21, 1e3), True, None, none))
    >>> round(curve.centre, 4), round(curve.width, 4)
    (0.2, 0.03)
    """
    if free_plateau is None:
        tied = fit_curve(data, free_plateau=False)
        if tied is None or not tied.resolved:
            free = _try_free(data)
            return free if tied is None else tied
        if not _off_plateau(data, tied):
            return tied
        free = _try_free(data)
        sure = free is not None and free.resolved and _contradicts(free, data)
        return free if sure else tied
    prior = np.inf if free_plateau else data.plateau_sigma
    top = _plateau_guess(data) if free_plateau else 1.0
    if not (data.fraction.min() < 0.5 * top < data.fraction.max()):
        return None
    return _fitted(data, _start(data, top), prior)


def _off_plateau(data, tied):
    """Return whether pulses beyond the onset make another plateau worth a try."""
    above = data.fraction[data.x > tied.centre]
    return above.size >= 3 and abs(np.median(above[above > 0.8 * np.median(above)]) - 1.0) > 0.005


def _try_free(data):
    above = int(np.sum(data.fraction > 0.5 * _plateau_guess(data)))
    return fit_curve(data, free_plateau=True) if above >= 3 else None


def _plateau_guess(data):
    """Return the middle of the fractions at the highest supersaturations."""
    last = np.argsort(data.x)[-max(3, data.x.size // 6):]
    return float(max(np.median(data.fraction[last]), 1e-6))


def _contradicts(free, data):
    distance = abs(free.plateau - 1.0)
    sigma = math.hypot(math.sqrt(free.covariance[2, 2]), data.plateau_sigma)
    return distance > _PLATEAU_SIGMAS * sigma


def _start(data, top):
    """Return centre, ln width and plateau from where fractions cross half of the plateau."""
    order = np.argsort(data.x, kind="stable")
    x, above = data.x[order], data.fraction[order] > 0.5 * top
    # The split that puts the fewest pulses on the wrong side.
    wrong = np.r_[0, np.cumsum(above)] + np.r_[np.cumsum(~above[::-1])[::-1], 0]
    place = int(np.clip(np.argmin(wrong), 1, x.size - 1))
    centre = 0.5 * (x[place - 1] + x[place])
    part = data.fraction[order] / top
    on_slope = (part > 0.1) & (part < 0.9)
    if on_slope.sum() >= 2:
        width = max(float(np.std(x[on_slope])), 1e-4 * np.ptp(x))
    else:
        width = max(0.5 * (x[place] - x[place - 1]), 1e-3 * np.ptp(x))
    return np.array([centre, math.log(max(width, 1e-9)), top])


def _slopes(values, x):
    """Return the derivatives of the curve by centre, ln width and plateau, shape (n, 3)."""
    centre, log_width, plateau = values
    z = (np.asarray(x, dtype=float) - centre) / math.exp(log_width)
    density = np.exp(-0.5 * np.minimum(np.abs(z), 38.0) ** 2) / math.sqrt(2 * math.pi)
    return np.stack([-plateau * density / math.exp(log_width), -plateau * density * z,
                     normal_part(z)], axis=1)


def _fitted(data, values, prior):
    noise = Noise(1.0, 0.0)
    for _ in range(0 if data.sigma is not None else _NOISE_TURNS):
        old, values = values, _scored(data, values, prior, noise, _FEW_STEPS)
        noise = _noise(data, values, noise, 2 + (prior > 0))
        if np.all(np.abs(values - old) <= _SETTLED):
            break
    return _curve(data, _scored(data, values, prior, noise, _MANY_STEPS), prior, noise)


def _variance(data, values, noise):
    """Return the variance of each fraction around the curve."""
    slopes = _slopes(values, data.x)
    part = np.clip(slopes[:, 2], 0.0, 1.0)
    by_ratio = slopes[:, 0] ** 2 * data.variance_x
    half_count = (0.5 * noise.counting / data.seeds) ** 2
    if data.sigma is not None:
        return data.sigma**2 + by_ratio
    plain = noise.counting * part * (1.0 - part) / data.seeds + noise.proportional**2 * part**2
    return values[2] ** 2 * (plain + half_count) + by_ratio


def _scored(data, values, prior, noise, steps):
    """Return the values at which the weighted scores vanish, by Gauss-Newton steps."""
    low, high = _bounds(data)
    for _ in range(steps):
        step = np.linalg.lstsq(*_equations(data, values, prior, noise), rcond=None)[0]
        if prior == 0:
            step[2] = 0.0
        if not np.all(np.abs(step) < 1e100):  # nothing on the slope any more
            break
        size = max(abs(step[0]) / math.exp(values[1]), abs(step[1]) / 0.7, 1.0)
        values = values + step / size
        values = np.clip(values, low, high)
        if np.all(np.abs(step) <= 1e-10 * (1e-3 + np.abs(values))):
            break
    return values


def _bounds(data):
    """Return the lowest and the highest centre, ln width and plateau that pulses could tell."""
    span = max(float(np.ptp(data.x)), 1e-9)
    top = max(2.0 * float(data.fraction.max()), 2.0)
    low = [data.x.min() - 5.0 * span, math.log(1e-4 * span), 1e-3]
    return np.array(low), np.array([data.x.max() + 5.0 * span, math.log(20.0 * span), top])


def _equations(data, values, prior, noise):
    """Return matrix and right side of a Gauss-Newton step."""
    weights = 1.0 / np.sqrt(_variance(data, values, noise))
    slopes = _slopes(values, data.x)
    rest = data.fraction - values[2] * slopes[:, 2]
    if prior == 0:
        slopes[:, 2] = 0.0
    matrix, right = weights[:, None] * slopes, weights * rest
    if 0 < prior < np.inf:
        matrix = np.vstack([matrix, [0.0, 0.0, 1.0 / prior]])
        right = np.r_[right, (1.0 - values[2]) / prior]
    return matrix, right


def _noise(data, values, noise, parameters):
    """Return the noise that explains the squared residuals."""
    slopes = _slopes(values, data.x)
    part = np.clip(slopes[:, 2], 0.0, 1.0)
    told = part > 0.5 / data.seeds  # pulses far below the onset have nothing to scatter
    known = data.variance_x[told] * (slopes[told, 0] / values[2]) ** 2
    counting, proportional = (part * (1.0 - part) / data.seeds)[told], part[told] ** 2
    squares = (data.fraction / values[2] - part)[told] ** 2
    squares = squares * part.size / max(part.size - parameters, 1) - known
    first, second = noise.counting, noise.proportional**2
    half = (0.5 * first / data.seeds[told]) ** 2
    variance = first * counting + second * proportional + known + half
    weights = 1.0 / np.maximum(variance, 1e-30)
    if told.sum() < _FEWEST_FOR_TWO:
        proportional = np.zeros_like(proportional)
    first, second = _two_parts(weights * squares, weights * counting, weights * proportional,
                               data.counted)
    if not data.counted:  # without counts of its own, the foot of the curve would rule the fit
        first = max(first, _LEAST_COUNTING * second * float(np.median(data.seeds)))
    return Noise(first, math.sqrt(second))


def _two_parts(squares, counting, proportional, counted):
    """Return the two non-negative factors that fit squared residuals best."""
    if counted:
        rest = squares - counting
        return 1.0, max(_projected(rest, proportional), 0.0)
    if counting.size:
        design = np.stack([counting, proportional], axis=1)
        first, second = np.linalg.lstsq(design, squares, rcond=None)[0]
        if first < 0:
            first, second = 0.0, _projected(squares, proportional)
        elif second < 0:
            first, second = _projected(squares, counting), 0.0
        return max(float(first), _SMALLEST_PART), max(float(second), 0.0)
    return 1.0, 0.0


def _projected(squares, shape):
    """Return the factor of one shape that fits best."""
    return float(shape @ squares / max(float(shape @ shape), 1e-300))


def _curve(data, values, prior, noise):
    matrix, right = _equations(data, values, prior, noise)
    free = 3 if prior > 0 else 2
    covariance = np.zeros((3, 3))
    covariance[:free, :free] = _covariance(data, matrix[:, :free], right)
    freedom = max(data.x.size - free, 1)
    part = _slopes(values, data.x)[:, 2]
    half = 0.5 / data.seeds
    resolved = int(np.sum((part > np.maximum(0.02, half)) & (part < 0.98))) >= 2
    by_scatter = data.sigma is not None or not data.counted or noise.proportional > 0
    curve = Curve(float(values[0]), math.exp(values[1]), float(values[2]), covariance, noise,
                  freedom if by_scatter else np.inf, resolved, math.isinf(prior),
                  right[: data.x.size])
    return curve if resolved else _unresolved(data, curve)


def _covariance(data, matrix, right):
    """Return the covariance that the scatter itself shows, whatever its law (HC3)."""
    bread = np.linalg.pinv(matrix.T @ matrix)
    count = data.x.size
    if count < _FEWEST_FOR_TWO:
        freedom = max(count - matrix.shape[1], 1)
        least = 1.0 if data.sigma is not None or data.counted else 0.0
        return bread * max(least, float(right @ right) / freedom)
    lever = np.einsum("ni,ij,nj->n", matrix, bread, matrix)
    rest = right / np.maximum(1.0 - lever, 0.05)
    rest[count:] = 1.0  # what ties the plateau has its stated uncertainty
    scores = matrix * rest[:, None]
    return bread @ (scores.T @ scores) @ bread


def _unresolved(data, curve):
    """Return a curve whose centre is only known to lie between two pulses."""
    below = data.x[data.x < curve.centre]
    above = data.x[data.x >= curve.centre]
    low = float(below.max()) if below.size else curve.centre
    high = float(above.min()) if above.size else curve.centre
    covariance = np.diag([(high - low) ** 2 / 12.0, np.nan, curve.covariance[2, 2]])
    width = max(0.25 * (high - low), 1e-9)
    return Curve(0.5 * (low + high), width, curve.plateau, covariance, curve.noise, np.inf,
                 resolved=False, plateau_free=curve.plateau_free, score=curve.score)
