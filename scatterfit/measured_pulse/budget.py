"""Which input contributes how much to which result, and what the trace says about inputs."""

import numpy as np

from scatterfit.inversion.problem import value_of
from scatterfit.measured_pulse.record import BudgetLine, Learnt

DURATION = "effective duration of the hold"
"""Line of the nucleation rate's budget."""
_STATED = ("temperature", "vapour", "beam.", "detector.", "transmission.", "chamber.")
_INPUTS = {
    "scale": "computed growth rate", "bend": "shape of the growth law",
    "creep": "creep of the gas during growth", "stretch": "duration of the births",
    "depletion": "computed depletion",
    "accommodation": "vapour.mass_accommodation",
    "delay": "clock of the births", "temperature": "chamber.temperature_K",
    "vapour": "vapour", "threshold": "threshold of the seeds",
}


def budget_lines(name, factor, variances, fit):
    """Return the lines of one quantity's budget, largest first.

    Parameters
    ----------
    name : str
        Key of the quantity.
    factor : float
        From SI to the unit of its key [-].
    variances : tuple
        From the noise, a dict by parameter or input, and the standard uncertainty that stands
        for the model, all in SI [any].
    fit : Fit
        For the names of the angles.

    Returns
    -------
    lines : list of BudgetLine
        Those of more than a millionth of the variance.
    """
    noise, parts, floor = variances
    columns = input_names(fit)
    variances = {"noise": noise, "model": floor**2}
    variances |= {columns.get(key, _INPUTS.get(key, key)): value for key, value in parts.items()}
    total = sum(variances.values())
    if not total > 0.0 or not np.isfinite(total):
        return []
    lines = [
        BudgetLine(key, name, float(np.sqrt(value)) * factor, float(value / total))
        for key, value in variances.items() if value > 1e-6 * total
    ]
    return sorted(lines, key=lambda line: -line.share)


def rate_budget(nucleation, number, fit):
    """Return the lines of the nucleation rate's budget: those of the number, and the duration.

    Parameters
    ----------
    nucleation : NucleationConditions
        With the rate.
    number : NumberResults
        Of the pulse.
    fit : Fit
        For the names of the angles.

    Returns
    -------
    lines : list of BudgetLine
        Empty without a rate.
    """
    rate = nucleation.rate
    if rate is None:
        return []
    factor = rate.value / number.concentration.value
    parts = {key: part * factor**2 for key, part in number.parts.items()}
    duration = nucleation.effective
    parts[DURATION] = (rate.value * duration.sigma / duration.value) ** 2
    return budget_lines("nucleation_rate_per_cm3_s", 1e-6, (
        number.noise * factor**2, parts, number.floor * factor), fit)


def learnt_inputs(fit, after):
    """Return what the trace says about inputs that the chamber file states with a sigma.

    Parameters
    ----------
    fit : Fit
        Best cloud.
    after : Posterior
        Of the fit.

    Returns
    -------
    learnt : tuple of Learnt
        One an input that is stated.
    """
    columns = input_names(fit)
    sigmas = np.sqrt(np.maximum(np.diag(after.covariance), 0.0))
    found = []
    for i, name in enumerate(after.names):
        prior = after.priors.get(name)
        if prior is None or (name not in _STATED and not name.startswith(("angle:", *_STATED))):
            continue
        shift = float(after.step[i])
        if name in fit.problem.names:
            shift += value_of(fit.best.cloud, name) - prior[0]
        found.append(Learnt(columns.get(name, _INPUTS.get(name, name)), shift / prior[1],
                            float(sigmas[i] / prior[1])))
    return tuple(found)


def input_names(fit):
    """Return the chamber file's names of the angles.

    Parameters
    ----------
    fit : Fit
        Of the pulse.

    Returns
    -------
    names : dict of str to str
        By parameter.
    """
    return {f"angle:{i}": f"detector.{d.column}.angle_deg"
            for i, d in enumerate(fit.problem.model.setup.apparatus.detectors)}
