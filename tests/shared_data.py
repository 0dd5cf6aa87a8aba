"""Data beside the project, not in it: practice pulses of an independent program, real recordings.

They are never copied into the project, so a checkout that stands alone skips what needs them.
"""

from pathlib import Path

import pytest

SHARED = Path(__file__).resolve().parents[2] / "shared"
PRACTICE = SHARED / "practice"
REAL = SHARED / "real"

needs_practice = pytest.mark.skipif(
    not PRACTICE.is_dir(), reason="the practice pulses (../shared/practice) are not here")
needs_real = pytest.mark.skipif(
    not REAL.is_dir(), reason="the real recordings (../shared/real) are not here")
