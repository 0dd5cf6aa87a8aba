"""How many lobes each scattering angle shows while droplets grow: where to put a detector.

More lobes locate the radius better, but those of neighbouring radii lie closer together and are
easier to mistake for one another. Run: ``python examples/which_angle.py``.
"""

from dataclasses import replace
from math import radians
from pathlib import Path

import scatterfit
from scatterfit.cloud_optics.build import build_kernel
from scatterfit.cloud_optics.extrema import kernel_extrema

BENCH = Path(__file__).with_name("bench.toml")
ANGLES = (15, 30, 60, 90)
LARGEST = 3e-6
WATER_IN_ARGON = 1.334


def main():
    """Print the count of maxima and minima up to the largest radius for each angle."""
    bench = scatterfit.read_chamber(BENCH)
    looking = tuple(replace(bench.detectors[0], angle=radians(angle)) for angle in ANGLES)
    analysis = replace(bench.analysis, max_radius=LARGEST)
    bench = replace(bench, detectors=looking, analysis=analysis)
    table = build_kernel(bench, 1.0002, WATER_IN_ARGON).at(WATER_IN_ARGON, spread=0.01)
    for angle, row in zip(ANGLES, table.collected, strict=True):
        found = kernel_extrema(table, row, radius_range=(2e-7, LARGEST), least_depth=0.1)
        lobes = [one for one in found if one.kind != "shoulder"]
        print(f"{angle:3d} degrees: {len(lobes):2d} maxima and minima up to {1e6 * LARGEST:g} um")


if __name__ == "__main__":
    main()
