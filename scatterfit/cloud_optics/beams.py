"""Cross sections of a bench with one or more beams, on one grid of radius.

Nodes are tables against size parameter, the same for every colour. Against ln r a second colour's
table is that of the first, moved by the logarithm of the wavelengths' ratio. All tables have the
same spacing, so that joining them is a move by a part of one step, the same at every point.
"""

from dataclasses import dataclass, replace

import numpy as np

from scatterfit.apparatus.records import Apparatus
from scatterfit.cloud_optics.build import KernelStore, build_kernel
from scatterfit.cloud_optics.table import OpticalKernel, lagrange_weights

_TAPS = 8
_SAME = 1e-9


@dataclass(frozen=True)
class BenchTable:
    """Cross sections of a cloud in every channel, on a uniform grid of ln(radius in metres)."""

    log_radius_start: float
    """ln of the smallest radius in metres [-]."""
    step: float
    """Spacing in ln(radius) [-]."""
    collected: np.ndarray
    """Light collected by each detector per irradiance of its beam, shape (n_detectors, n)
    [m^2]."""
    extinction: np.ndarray
    """Extinction cross section in each beam, shape (n_beams, n) [m^2]."""
    lost: np.ndarray
    """What the transmission loses: extinction in its beam (the first, where there is no
    transmission) less the light scattered into its receiver, shape (n,) [m^2]."""
    d_collected_d_angle: np.ndarray | None = None
    """Derivative for the detector's own angle, shape (n_detectors, n) [m^2/rad]."""

    @property
    def radius(self) -> np.ndarray:
        """Return the radii of the table, shape (n,) [m]."""
        return np.exp(self.log_radius_start + self.step * np.arange(self.lost.size))


@dataclass(frozen=True)
class BenchKernel:
    """The kernels of all beams of one bench and gas."""

    kernels: tuple[OpticalKernel, ...]
    """One a beam, of the channels that see it."""
    detectors: tuple[tuple[int, ...], ...]
    """For each beam the detectors that see it."""
    transmitted: int
    """Beam of the transmission; the first where there is none."""

    @property
    def wavenumber(self) -> float:
        """Return the largest wavenumber in the gas among the beams [1/m]."""
        return max(kernel.wavenumber for kernel in self.kernels)

    def at(self, relative_indices, angle_shifts=None, spread=0.0, *, derivatives=False):
        """Return the table for one index a beam, for shifted detectors, for a spread of radius.

        Parameters
        ----------
        relative_indices : array_like of complex, shape (n_beams,)
            Index of the liquid over that of the gas at each beam's wavelength [-].
        angle_shifts : array_like, shape (n_detectors,), optional
            Added to the nominal angle of each detector [rad].
        spread : float
            Standard deviation of ln(radius) [-].
        derivatives : bool
            Fill in the derivatives for angles too.

        Returns
        -------
        table : BenchTable
            Cross sections against radius.

        Raises
        ------
        InvalidInputError
            If an index or a shift lies outside what the kernel was built for.
        """
        count = sum(map(len, self.detectors))
        shifts = np.zeros(count) if angle_shifts is None else np.asarray(angle_shifts, dtype=float)
        tables = [
            kernel.at(index, shifts[list(own)], spread, derivatives=derivatives)
            for kernel, own, index in zip(self.kernels, self.detectors, relative_indices,
                                          strict=True)
        ]
        grid = _Grid.over(tables)
        order = np.argsort([i for own in self.detectors for i in own])

        def joined(name):
            return np.concatenate([grid.moved(t, getattr(t, name)) for t in tables])[order]

        seen = tables[self.transmitted]
        return BenchTable(
            grid.start, grid.step, joined("collected"),
            np.concatenate([grid.moved(t, t.extinction[None]) for t in tables]),
            grid.moved(seen, (seen.extinction - seen.forward)[None])[0],
            joined("d_collected_d_angle") if derivatives else None,
        )


@dataclass(frozen=True)
class _Grid:
    """The part of the first table's grid that all tables cover."""

    start: float
    step: float
    count: int

    @classmethod
    def over(cls, tables):
        """Return the common grid of several tables."""
        first = tables[0]
        if all(abs(t.log_radius_start - first.log_radius_start) < _SAME
               and t.extinction.size == first.extinction.size for t in tables):
            return cls(first.log_radius_start, first.step, first.extinction.size)
        before = max(t.log_radius_start - first.log_radius_start for t in tables) / first.step
        after = min(t.log_radius_end - first.log_radius_start for t in tables) / first.step
        low, high = int(np.ceil(before)) + _TAPS // 2, int(np.floor(after)) - _TAPS // 2
        return cls(first.log_radius_start + low * first.step, first.step, high - low + 1)

    def moved(self, table, rows):
        """Return rows of a table on this grid, shape (n_rows, count)."""
        whole, part = _steps(self.start - table.log_radius_start, self.step)
        if part == 0.0:
            return rows[:, whole : whole + self.count]
        first = whole - _TAPS // 2 + 1
        weights = lagrange_weights(np.arange(float(_TAPS)), _TAPS // 2 - 1 + part)[:, 0]
        return sum(weight * rows[:, first + i : first + i + self.count]
                   for i, weight in enumerate(weights))


def _steps(distance, step):
    """Return a distance in whole steps and the part of one that is left, in [0, 1) [-]."""
    steps = distance / step
    nearest = round(steps)
    if abs(steps - nearest) < _SAME / step:
        return nearest, 0.0
    whole = int(np.floor(steps))
    return whole, float(steps - whole)


def beam_indices(apparatus, gas, substance, state):
    """Return the indices of gas and liquid in each beam.

    Parameters
    ----------
    apparatus : Apparatus
        Beams, and stated indices of the liquid.
    gas : Carrier
        Of ``matter``.
    substance : Substance
        Of ``matter``; its correlation serves where no index is stated.
    state : tuple of float
        Temperature [K] and pressure [Pa] of the gas, temperature of the liquid [K].

    Returns
    -------
    gas_indices : ndarray, shape (n_beams,)
        Refractive index of the gas against vacuum [-].
    liquid_indices : ndarray of complex, shape (n_beams,)
        Refractive index of the liquid against vacuum [-].
    """
    temperature, pressure, warmth = state
    around, inside = [], []
    for beam in apparatus.beams:
        stated = (beam.refractive_index, apparatus.vapour.refractive_index)
        known = next((index for index in stated if index is not None), None)
        if known is None:
            known = substance.refractive_index(beam.wavelength, warmth)
        inside.append(complex(known))
        around.append(float(gas.refractive_index(beam.wavelength, temperature, pressure)))
    return np.array(around), np.array(inside)


def build_bench_kernel(
    apparatus: Apparatus,
    gas_indices,
    relative_indices,
    store: KernelStore | None = None,
    *,
    index_reach: float = 0.0,
    angle_reach=0.0,
) -> BenchKernel:
    """Return the kernels of all beams of a bench.

    Parameters
    ----------
    apparatus : Apparatus
        Beams, detectors, transmission and largest radius are used.
    gas_indices : array_like, shape (n_beams,)
        Refractive index of the gas against vacuum in each beam [-].
    relative_indices : array_like of complex, shape (n_beams,)
        Index of the liquid over that of the gas in each beam [-].
    store : KernelStore, optional
        Where nodes are looked up and kept.
    index_reach : float
        How much higher an index the kernel has to serve too [-].
    angle_reach : float or sequence of float
        How far the fit may shift each detector's angle [rad].

    Returns
    -------
    kernel : BenchKernel
        Tables are made by its method ``at``.

    Raises
    ------
    InvalidInputError
        If an index or an angle reach is out of range.
    KernelError
        If newly built curves disagree with the independent Mie library.
    """
    reach = np.broadcast_to(angle_reach, len(apparatus.detectors))
    kernels, detectors = [], []
    for number, (gas, liquid) in enumerate(zip(gas_indices, relative_indices, strict=True)):
        own = tuple(i for i, d in enumerate(apparatus.detectors)
                    if apparatus.beam_number(d) == number)
        detectors.append(own)
        kernels.append(build_kernel(
            _lit_by(apparatus, number, own), float(gas), [liquid, liquid + index_reach], store,
            angle_reach=reach[list(own)],
        ))
    seen = apparatus.transmission
    return BenchKernel(tuple(kernels), tuple(detectors),
                       0 if seen is None else apparatus.beam_number(seen))


def _lit_by(apparatus, number, detectors):
    """Return the bench with one of its beams and the channels that see it."""
    seen = apparatus.transmission
    return replace(
        apparatus, beam=apparatus.beams[number], other_beams=(),
        detectors=tuple(apparatus.detectors[i] for i in detectors),
        transmission=seen if seen and apparatus.beam_number(seen) == number else None,
    )
