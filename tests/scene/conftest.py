"""Tests of the scene room share `small_scene`; BLAS keeps to one thread, as in every process of the service."""

import sys
from pathlib import Path

import pytest
from threadpoolctl import threadpool_limits

HERE = str(Path(__file__).parent)
if HERE not in sys.path:
    sys.path.insert(0, HERE)


@pytest.fixture(autouse=True, scope="session")
def one_blas_thread():
    with threadpool_limits(1, user_api="blas"):
        yield
