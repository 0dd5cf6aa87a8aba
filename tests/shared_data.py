"""Data beside the project, not in it: practice pulses of an independent program, real recordings.

They are never copied into the project, so a checkout that stands alone skips what needs them.
"""

from pathlib import Path

import pytest

SHARED = Path(__file__).resolve().parents[2] / "shared"
PRACTICE = SHARED / "practice"
REAL = SHARED / "real"

# A checkout that stands alone has no such folder, and the data may not be copied into the project.
needs_practice = pytest.mark.skipif(
    not PRACTICE.is_dir(), reason="the practice pulses (../shared/practice) are not here")
# The same for the recordings: without them there is nothing to compare with.
needs_real = pytest.mark.skipif(
    not REAL.is_dir(), reason="the real recordings (../shared/real) are not here")

TUBE = """
[beam]
wavelength_nm = 635
polarization = "unpolarized"
[transmission]
column = "transmitted_V"
path_mm = 900
path_mm_sigma = 200
[pressure]
column = "pressure_kPa"
[vapour]
substance = "water"
saturation_ratio = 0.97
saturation_ratio_sigma = 0.04
[gas]
carrier = "air"
[seed]
[chamber]
temperature_K = 295
temperature_K_sigma = 2
"""
"""Chamber file of the recordings: path, humidity and temperature are uncertain inputs."""
