"""What tells of a pulse, before any fit, that none can be made."""

import numpy as np

from scatterfit.measured_pulse.prepare import optical_columns
from scatterfit.measured_pulse.record import Reason


def flat_columns(apparatus, columns):
    """Return a reason for each optical column that never changes.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    columns : dict of str to ndarray
        Trace columns [V].

    Returns
    -------
    reasons : tuple of Reason
        Empty where all of them change.
    """
    found = []
    for name, _, _ in optical_columns(apparatus):
        values = np.asarray(columns[name], dtype=float)
        values = values[np.isfinite(values)]
        if values.size and np.ptp(values) == 0.0:
            found.append(Reason("flat-channel", (
                f"column {name} is {values[0]:g} V throughout: is the detector connected and the "
                "range right?"
            )))
    return tuple(found)


def dry(setup):
    """Return whether no droplet could grow at any time.

    Parameters
    ----------
    setup : GrowthSetup
        Of the pulse.

    Returns
    -------
    dry : bool
        Neither the hold nor the growth stage is supersaturated.
    """
    held = setup.hold.saturation_ratio if setup.hold is not None else 0.0
    return max(setup.growth_saturation_ratio, held) <= 1.0
