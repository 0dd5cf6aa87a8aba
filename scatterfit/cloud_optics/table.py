"""Cross sections of a cloud against droplet radius: kernels, tables, interpolation.

An `OpticalKernel` holds averaged curves at a few relative indices; its method ``at`` makes the
`KernelTable` of one pulse (index, angles, spread of radius); `curves` and `interpolate` read it.
"""

from dataclasses import dataclass

import numpy as np

from scatterfit.cloud_optics.node import LOWEST_SIZE, Node, Recipe
from scatterfit.errors import InvalidInputError

INDEX_STEP = 1e-3
"""Spacing of the lattice of relative indices [-]."""

_TILT = 4.0
_RAYLEIGH_POWER = 6.0
_POLE = np.sqrt(3.0) - 2.0
_TAPS = 14


@dataclass(frozen=True)
class KernelTable:
    """Cross sections of a cloud on a uniform grid of ln(radius in metres)."""

    log_radius_start: float
    """ln of the smallest radius in metres [-]."""
    step: float
    """Spacing in ln(radius) [-]."""
    spread: float
    """Standard deviation of ln(radius) of the droplets [-]."""
    collected: np.ndarray
    """Light collected by each detector per irradiance, shape (n_detectors, n) [m^2]."""
    extinction: np.ndarray
    """Extinction cross section, shape (n,) [m^2]."""
    forward: np.ndarray
    """Light scattered into the transmission receiver, shape (n,) [m^2]."""
    d_collected_d_index: np.ndarray | None = None
    """Derivative for the real relative index, shape (n_detectors, n) [m^2]."""
    d_extinction_d_index: np.ndarray | None = None
    """Derivative for the real relative index, shape (n,) [m^2]."""
    d_collected_d_angle: np.ndarray | None = None
    """Derivative for the detector's own angle, shape (n_detectors, n) [m^2/rad]; zero where the
    kernel was built without angle nodes."""

    @property
    def log_radius_end(self) -> float:
        """Return ln of the largest radius in metres [-]."""
        return self.log_radius_start + self.step * (self.extinction.size - 1)

    @property
    def radius(self) -> np.ndarray:
        """Return the radii of the table, shape (n,) [m]."""
        return np.exp(self.log_radius_start + self.step * np.arange(self.extinction.size))


@dataclass(frozen=True)
class OpticalKernel:
    """Averaged curves of one bench and gas on a lattice of relative indices."""

    wavenumber: float
    """2 pi n_gas / wavelength [1/m]."""
    recipe: Recipe
    """What the nodes were made from."""
    first_index: int
    """Real index of the first node in steps of 0.001."""
    absorption: float
    """Imaginary part of the relative index, the same in all nodes [-]."""
    nodes: tuple[Node, ...]
    """At consecutive indices of the lattice, at least four."""

    @property
    def index_range(self) -> tuple[float, float]:
        """Return the range of relative index that the kernel serves [-]."""
        last = self.first_index + len(self.nodes) - 1
        return (self.first_index + 1) * INDEX_STEP, (last - 1) * INDEX_STEP

    def at(
        self,
        relative_index: complex,
        angle_shifts: np.ndarray | None = None,
        spread: float = 0.0,
        *,
        derivatives: bool = False,
    ) -> KernelTable:
        """Return the table for one index, for shifted detectors, for a spread of radius.

        Parameters
        ----------
        relative_index : complex
            Index of the liquid over that of the gas; its imaginary part is that of the kernel [-].
        angle_shifts : array_like, shape (n_detectors,), optional
            Added to the nominal angle of each detector [rad].
        spread : float
            Standard deviation of ln(radius); what is below the spread built into the kernel
            (0.003 by default) gives that one [-].
        derivatives : bool
            Fill in the derivatives for index and angles too.

        Returns
        -------
        table : KernelTable
            Cross sections against radius.

        Raises
        ------
        InvalidInputError
            If the index or a shift lies outside what the kernel was built for.

        Notes
        -----
        Cubic Lagrange interpolation between the four nearest indices, of fourth order between
        the five angles.
        """
        nodes, weights = self._nearest(relative_index)
        shifts = np.zeros(len(self.recipe.views)) if angle_shifts is None else angle_shifts
        angle_weights = self._angle_weights(np.asarray(shifts, dtype=float))
        orders = [(0, 0), (1, 0), (0, 1)] if derivatives else [(0, 0)]
        rows = [self._collected(nodes, weights[:, i], angle_weights, j) for i, j in orders]
        rows.append(weights[:, : len(orders[:2])].T @ [node.extinction for node in nodes])
        rows.append(weights[:, :1].T @ [node.forward for node in nodes])
        stacked = np.concatenate(rows) / self.wavenumber**2
        stacked = widen(stacked, self.recipe.step, self.recipe.spread, spread)
        return self._named(stacked, max(spread, self.recipe.spread), derivatives)

    def _named(self, stacked, spread, derivatives):
        """Cut the stacked rows into the fields of a table."""
        count = len(self.recipe.views)
        start = float(np.log(LOWEST_SIZE / self.wavenumber))
        head = (start, self.recipe.step, spread, stacked[:count])
        if not derivatives:
            return KernelTable(*head, stacked[count], stacked[count + 1])
        by_index, by_angle = stacked[count : 2 * count], stacked[2 * count : 3 * count]
        extinction, by_index_too, forward = stacked[3 * count :]
        return KernelTable(*head, extinction, forward, by_index, by_index_too, by_angle)

    def _nearest(self, relative_index):
        """Return the four nodes to use and their weights for value and derivative, (4, 2)."""
        real = complex(relative_index).real
        low, high = self.index_range
        if not low - 1e-9 <= real <= high + 1e-9:
            message = (
                f"relative index {real:.5f} lies outside the kernel's range {low:.3f} to "
                f"{high:.3f}; build the kernel for it"
            )
            raise InvalidInputError(message)
        position = real / INDEX_STEP - self.first_index
        first = min(max(int(np.floor(position)) - 1, 0), len(self.nodes) - 4)
        weights = lagrange_weights(np.arange(4.0), position - first)
        weights[:, 1] /= INDEX_STEP
        return self.nodes[first : first + 4], weights

    def _angle_weights(self, shifts):
        """Return for each detector the weights of its axes, a list of shape (n_axes, 2)."""
        found = []
        for number, (view, shift) in enumerate(zip(self.recipe.views, shifts, strict=True)):
            reach = 2 * view.angle_step
            if abs(shift) > reach * (1 + 1e-9):
                message = (
                    f"angle shift of detector {number} is {shift:g} rad, the kernel reaches "
                    f"{reach:g} rad; build it with a larger angle step"
                )
                raise InvalidInputError(message)
            if not reach:
                found.append(np.array([[1.0, 0.0]]))
                continue
            weights = lagrange_weights(np.arange(-2.0, 3.0), shift / view.angle_step)
            weights[:, 1] /= view.angle_step
            found.append(weights)
        return found

    def _collected(self, nodes, index_weights, angle_weights, angle_order):
        """Return collected light combined over nodes and axes, shape (n_detectors, n)."""
        rows = np.zeros((len(angle_weights), self.recipe.count))
        for share, node in zip(index_weights, nodes, strict=True):
            for i, axes in enumerate(node.collected):
                for weight, axis in zip(angle_weights[i][:, angle_order], axes, strict=True):
                    if weight:
                        rows[i] += share * weight * axis
        return rows


@dataclass(frozen=True)
class Curves:
    """Rows of a table as cubic splines, laid out for fast reading of all rows at once."""

    log_radius_start: float
    """ln of the smallest radius in metres [-]."""
    step: float
    """Spacing in ln(radius) [-]."""
    cells: np.ndarray
    """Polynomial coefficients of each interval, constant term first, shape (4, n_rows, n - 1),
    in the unit of the rows."""

    @property
    def log_radius_end(self) -> float:
        """Return ln of the largest radius in metres; beyond it values stand still [-]."""
        return self.log_radius_start + self.step * self.cells.shape[-1]


def curves(table: KernelTable, rows: np.ndarray) -> Curves:
    """Prepare rows on a table's grid for interpolation.

    Parameters
    ----------
    table : KernelTable
        Gives the grid.
    rows : ndarray, shape (n_rows, n)
        Curves on the table's grid, such as ``table.collected`` or
        ``np.vstack([table.collected, table.extinction - table.forward])`` [m^2].

    Returns
    -------
    curves : Curves
        Interpolating cubic splines: twice continuously differentiable.
    """
    rows = np.atleast_2d(rows)
    taps = np.sqrt(3.0) * _POLE ** np.abs(np.arange(-_TAPS, _TAPS + 1))
    padded = np.pad(rows, ((0, 0), (_TAPS + 1, _TAPS + 1)), mode="reflect", reflect_type="odd")
    c = np.stack([np.convolve(row, taps, mode="valid") for row in padded])
    before, here, after, beyond = c[:, :-3], c[:, 1:-2], c[:, 2:-1], c[:, 3:]
    cells = np.stack(
        [
            rows[:, :-1],
            (after - before) / 2,
            (before - 2 * here + after) / 2,
            (beyond - before + 3 * (here - after)) / 6,
        ]
    )
    return Curves(table.log_radius_start, table.step, cells)


def interpolate(curves: Curves, log_radius: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return all rows and their slopes at given radii.

    Parameters
    ----------
    curves : Curves
        From `curves`.
    log_radius : ndarray, shape (n,)
        ln of the radius in metres; -inf is no droplet [-].

    Returns
    -------
    values : ndarray, shape (n_rows, n)
        The rows at the radii, in their unit [m^2]. Below the table they fall with the sixth power
        of radius, as small droplets scatter; above it they keep the last value with slope 0
        (compare with ``curves.log_radius_end``).
    slopes : ndarray, shape (n_rows, n)
        d(values)/d(ln radius) [m^2].

    Examples
    --------
    >>> table = KernelTable(0.0, 0.1, 0.0, np.empty((0, 5)), np.arange(5.0), np.zeros(5))
    >>> value, slope = interpolate(curves(table, table.extinction), np.array([0.25]))
    >>> value, slope
    (array([[2.5]]), array([[10.]]))
    """
    position = (log_radius - curves.log_radius_start) / curves.step
    last = curves.cells.shape[-1]
    t = np.clip(position, 0.0, last)
    cell = np.minimum(t.astype(np.intp), last - 1)
    t -= cell
    constant, linear, square, cube = curves.cells.take(cell, axis=-1)
    values = cube * t
    slopes = 2 * values
    values += square
    slopes += values
    slopes += square
    values *= t
    values += linear
    values *= t
    values += constant
    slopes *= t
    slopes += linear
    slopes /= curves.step
    _beyond_the_ends(position, last, curves.step, values, slopes)
    return values, slopes


def _beyond_the_ends(position, last, step, values, slopes):
    """Correct values and slopes in place where radii lie outside the table."""
    below = position < 0
    if below.any():
        values[:, below] *= np.exp(_RAYLEIGH_POWER * step * position[below])
        slopes[:, below] = _RAYLEIGH_POWER * values[:, below]
    above = position > last
    if above.any():
        slopes[:, above] = 0.0


def widen(rows: np.ndarray, step: float, present: float, wanted: float) -> np.ndarray:
    """Average rows further, from the spread they have to a wider one.

    Parameters
    ----------
    rows : ndarray, shape (n_rows, n)
        Curves on a uniform grid of ln(radius) [m^2].
    step : float
        Spacing of the grid [-].
    present : float
        Standard deviation of ln(radius) that is in the rows already [-].
    wanted : float
        Standard deviation wanted; where it is not larger, the rows come back unchanged [-].

    Returns
    -------
    rows : ndarray, shape (n_rows, n)
        Rows averaged over a normal distribution of ln(radius) of variance
        wanted^2 - present^2 [m^2].

    Notes
    -----
    The rows, continued beyond the table by the power laws of their ends, are divided by the
    fourth power of radius, which leaves little range for rounding to matter, and multiplied in
    Fourier space by exp((s (4 + i omega))^2 / 2): exact for what the grid holds. Right to 1e-9
    except within 5 ``wanted`` of the table's upper end, where the continuation shows.
    """
    if wanted <= present:
        return rows
    extra = np.sqrt(wanted**2 - present**2)
    count = rows.shape[1]
    pad = int(np.ceil(7 * extra / step)) + 8
    length = _fast_length(count + 2 * pad)
    grid = step * (np.arange(length) - pad)
    levelled = _continued(rows, pad, length, step) * np.exp(-_TILT * grid)
    omega = 2 * np.pi * np.fft.rfftfreq(length, step)
    response = np.exp((extra * (_TILT + 1j * omega)) ** 2 / 2)
    averaged = np.fft.irfft(np.fft.rfft(levelled) * response, length)[:, pad : pad + count]
    return averaged * np.exp(_TILT * grid[pad : pad + count])


def _continued(rows, pad, length, step):
    """Return rows with power laws on both sides, shape (n_rows, length)."""
    out = np.empty((rows.shape[0], length))
    count = rows.shape[1]
    out[:, pad : pad + count] = rows
    with np.errstate(divide="ignore", invalid="ignore"):
        power = np.log(rows[:, 1] / rows[:, 0]) / step
    power = np.where(np.isfinite(power), power, _RAYLEIGH_POWER)[:, None]
    out[:, :pad] = rows[:, :1] * np.exp(power * step * np.arange(-pad, 0))
    out[:, pad + count :] = rows[:, -1:] * np.exp(2 * step * np.arange(1, length - pad - count + 1))
    return out


def _fast_length(least):
    """Return the next length of the form 2^a 3^b 5^c, which Fourier transforms take fast."""
    best = 1 << (least - 1).bit_length()
    for five in (1, 5, 25, 125):
        for three in (1, 3, 9, 27, 81):
            length = five * three
            length <<= max(0, (-(-least // length) - 1).bit_length())
            best = min(best, length)
    return best


def lagrange_weights(nodes: np.ndarray, position: float) -> np.ndarray:
    """Return weights of values at nodes for the interpolating polynomial and its derivative.

    Parameters
    ----------
    nodes : ndarray, shape (n,)
        Distinct positions [-].
    position : float
        Where to evaluate [-].

    Returns
    -------
    weights : ndarray, shape (n, 2)
        For the value [-] and for the derivative [-].

    Examples
    --------
    >>> lagrange_weights(np.array([0.0, 1.0]), 0.25)
    array([[ 0.75, -1.  ],
           [ 0.25,  1.  ]])
    """
    weights = np.empty((nodes.size, 2))
    for j, node in enumerate(nodes):
        roots = np.delete(nodes, j)
        polynomial = np.poly(roots) / np.prod(node - roots)
        weights[j] = np.polyval(polynomial, position), np.polyval(np.polyder(polynomial), position)
    return weights
