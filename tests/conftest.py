"""What all tests share: a store of kernels of their own, and a bench to vary."""

import copy

import pytest

from scatterfit.apparatus.check import apparatus_from_mapping
from scatterfit.files_kernel import default_store

BENCH = {
    "beam": {"wavelength_nm": 532.0, "polarization": "perpendicular"},
    "detector": [{
        "column": "scatter1_V", "angle_deg": 30.0, "half_angle_deg": 2.0,
        "gain_V_m": 6e4, "full_scale_V": 10.0, "time_constant_ms": 0.02,
    }],
    "transmission": {"column": "transmitted_V", "path_mm": 120.0},
    "pressure": {"column": "pressure_kPa"},
    "vapour": {"substance": "water", "mole_fraction": 0.0085, "refractive_index": 1.3368},
    "gas": {"carrier": "argon"},
    "chamber": {"temperature_K": 297.0, "pressure_kPa": 90.0, "path_mm": 120.0},
}
"""A plain bench: water in argon, 532 nm, 30 degrees, gauge, gain and transmission."""


@pytest.fixture(autouse=True, scope="session")
def kernel_cache(tmp_path_factory):
    """Keep kernels in a temporary folder for the whole session."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("SCATTERFIT_CACHE", str(tmp_path_factory.mktemp("kernels")))
        yield


@pytest.fixture(scope="session")
def store():
    """Return the session's store of kernels."""
    return default_store()


@pytest.fixture(scope="session")
def make_bench():
    """Return a function that gives the plain bench with some tables changed.

    A table given as ``None`` is left out; a dict is merged into the plain table (into the first
    detector for ``detector``); anything else takes its place.
    """

    def make(**changes):
        mapping = copy.deepcopy(BENCH)
        for table, change in changes.items():
            if change is None:
                mapping.pop(table, None)
            elif isinstance(change, dict):
                old = mapping.setdefault(table, {})
                old = old[0] if isinstance(old, list) else old
                old.update(change)
                for key in [key for key, value in old.items() if value is None]:
                    del old[key]
            else:
                mapping[table] = change
        return apparatus_from_mapping(mapping, "bench.toml")

    return make
