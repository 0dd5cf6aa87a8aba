"""How many droplets could have been there unseen."""

import numpy as np

from scatterfit.forward.growth_model import Cloud, no_shifts
from scatterfit.forward.model import channel_signals

_FEW = 1e4
_SCALES = (-2.0, 0.0, 2.0)


def upper_limit(problem):
    """Return the 95 percent upper limit on the number density, or ``None`` if there is none.

    The light of a cloud that grows as computed is fitted to the trace with a factor, beside the
    baseline; the limit is that of a Gaussian cut at zero. The growth rate is taken where the
    limit is weakest within two sigmas.

    Parameters
    ----------
    problem : Problem
        With the binned trace.

    Returns
    -------
    limit : float or None
        [1/m^3]; ``None`` without a gain and without a transmission.

    References
    ----------
    .. [1] O. Helene, "Upper limit of peak area", Nucl. Instrum. Methods 212 (1983) 319-322.
    """
    sigma = problem.priors["scale"][1]
    delay = problem.priors.get("delay", (0.0, 0.0))[0]
    limits = []
    for shift in _SCALES:
        cloud = Cloud(
            number=float(np.log(_FEW)), scale=shift * sigma, delay=delay, variance=1e-5,
            **no_shifts(problem.model),
        )
        found = _one_limit(problem, cloud)
        if found is not None:
            limits.append(found)
    return max(limits) if limits else None


def _one_limit(problem, cloud):
    """Return the limit for a cloud of known growth [1/m^3]."""
    signals, _ = channel_signals(problem.model, cloud, problem.bins.time)
    power, top = 0.0, 0.0
    for i, (channel, signal) in enumerate(zip(problem.model.channels, signals, strict=True)):
        weight, values = problem.bins.weights[i], problem.bins.values[i]
        if channel.kind == "scatter":
            if channel.gain is None:
                continue
            shape = signal.shape / _FEW
        else:
            full = float(np.median(values[weight > 0]))
            shape = full * (signal.shape - 1.0) / _FEW
        columns = np.vstack([np.ones_like(weight), problem.extras[i]])
        basis = np.linalg.qr((columns * weight).T)[0]
        own = shape * weight
        own = own - basis @ (basis.T @ own)
        power += float(own @ own)
        top += float(own @ (values * weight))
    if not power > 0.0:
        return None
    return _cut_gaussian_limit(top / power, 1.0 / np.sqrt(power))


def _cut_gaussian_limit(value, sigma):
    """Return the 95 percent limit of a positive quantity measured as value with sigma."""
    from scipy.special import ndtr, ndtri  # noqa: PLC0415  (only for pulses without a cloud)

    inside = ndtr(value / sigma)
    return float(value + sigma * ndtri(1.0 - 0.05 * inside)) if inside > 1e-12 else 1.645 * sigma
