"""Synthetic pulses of a bench, with kernels from the user's cache."""

import numpy as np

from scatterfit.files_kernel import default_store
from scatterfit.forward.simulate import Scenario, simulate_pulse
from scatterfit.measured_pulse.prepare import pulse_kernel, pulse_model


def simulate(  # noqa: PLR0913  (one argument per option of the command)
    apparatus, *, count=1, number=5e9, duration=0.1, rate=50e3, noise=0.01, seed=1,
    store=None, cloud=None,
):
    """Simulate pulses of a bench.

    Parameters
    ----------
    apparatus : Apparatus
        The bench.
    count : int
        Pulses.
    number : float
        Droplets per volume at the growth state; 0 for a blank [1/m^3].
    duration : float
        Length of the record after time zero [s].
    rate : float
        Samples a second [Hz].
    noise : float
        Relative noise of the scattered light [-].
    seed : int
        Of the noise.
    store : object, optional
        Where kernel tables are kept; the user's cache folder by default.
    cloud : dict, optional
        What nature does otherwise: fields of ``scatterfit.forward.model.Cloud``.

    Returns
    -------
    pulses : list of SimulatedPulse
        Samples and truth.
    """
    store = default_store() if store is None else store
    straight = (0.0,) * len(apparatus.detectors)

    def make_model(setup):
        kernel, relative, _ = pulse_kernel(setup, store)
        return pulse_model(setup, kernel, relative, straight)

    scenario = Scenario(number, duration, rate, noise, cloud=dict(cloud or {}))
    streams = np.random.SeedSequence(seed).spawn(count)
    return [
        simulate_pulse(apparatus, scenario, make_model, np.random.default_rng(stream))
        for stream in streams
    ]
