"""The rigs of these tests, live_rig and web_rig, are modules beside them."""

import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

HERE = str(Path(__file__).parent)
if HERE not in sys.path:
    sys.path.insert(0, HERE)

from web_rig import Served, serving  # noqa: E402


@pytest.fixture(scope="module")
def served() -> Iterator[Served]:
    """A server with a message of every topic; a test that changes one puts it back by `fill`."""
    with serving() as running:
        running.fill()
        yield running
