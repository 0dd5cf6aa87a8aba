"""A number with its uncertainty kept apart: what scatters, and what all pulses share."""

import math
from dataclasses import dataclass

from scatterfit.nucleation.line import INTERVAL
from scatterfit.nucleation.quantiles import normal_quantile

_NORMAL = normal_quantile(0.5 + INTERVAL / 2)


@dataclass(frozen=True)
class Estimate:
    """A value, the uncertainty that scatter gives it, and the shared one beside it."""

    value: float
    statistical: float
    """Standard uncertainty from scatter and from errors of single pulses."""
    systematic: float = 0.0
    """Standard uncertainty from errors that all pulses share."""
    factor: float = _NORMAL
    """Half width of the statistical 95 percent interval over its standard uncertainty [-]."""
    positive: bool = False
    """Whether the interval is one of the logarithm."""

    @property
    def sigma(self):
        """Standard uncertainty, both together."""
        return math.hypot(self.statistical, self.systematic)

    @property
    def interval(self):
        """Lower and upper end of the 95 percent interval."""
        half = math.hypot(self.factor * self.statistical, _NORMAL * self.systematic)
        if self.positive:
            stretch = math.exp(min(half / self.value, 700.0))
            return self.value / stretch, self.value * stretch
        return self.value - half, self.value + half

    def shifted(self, distance):
        """Return the same uncertainty around a value moved by a distance."""
        return Estimate(self.value + distance, self.statistical, self.systematic, self.factor)

    def to_dict(self, unit=1.0):
        """Return a quantity in another unit, or ``None`` where it is not determined.

        Examples
        --------
        >>> found = Estimate(30.0, 0.3, 0.4, 2.0).to_dict()
        >>> found["value"], found["sigma"], found["sigma_statistical"]
        (30.0, 0.5, 0.3)
        """
        numbers = (self.value, self.statistical, self.systematic)
        if not all(map(math.isfinite, numbers)):
            return None
        return {
            "value": float(self.value) * unit,
            "sigma": self.sigma * unit,
            "sigma_statistical": float(self.statistical) * unit,
            "sigma_systematic": float(self.systematic) * unit,
            "interval_95": [float(end) * unit for end in self.interval],
        }


def quantity(estimate, unit=1.0):
    """Return an estimate as a quantity of a result.

    Parameters
    ----------
    estimate : Estimate or None
        What is known.
    unit : float
        Factor from SI to the unit of the result's key [-].

    Returns
    -------
    quantity : dict or None
        As ``Estimate.to_dict``; ``None`` where nothing is known.

    Examples
    --------
    >>> quantity(None) is None
    True
    """
    return None if estimate is None else estimate.to_dict(unit)
