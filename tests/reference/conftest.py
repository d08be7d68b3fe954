"""Reference tests of beams use the plane waves of the beam room. BLAS keeps to one thread, as in the service."""

import sys
from pathlib import Path

import pytest
from threadpoolctl import threadpool_limits

BEAM = str(Path(__file__).parent.parent / "beam")
if BEAM not in sys.path:
    sys.path.insert(0, BEAM)


@pytest.fixture(autouse=True, scope="session")
def one_blas_thread():
    with threadpool_limits(1, user_api="blas"):
        yield
