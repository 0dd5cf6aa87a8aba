"""What all tests share: a store of kernels of their own, so that they touch nobody's cache."""

import pytest


@pytest.fixture(autouse=True, scope="session")
def kernel_cache(tmp_path_factory):
    """Keep kernels in a temporary folder for the whole session."""
    with pytest.MonkeyPatch.context() as patch:
        patch.setenv("SCATTERFIT_CACHE", str(tmp_path_factory.mktemp("kernels")))
        yield
