"""Under live load each process is killed, stopped or made to spin; the rest goes on and nothing is lost unflagged.

The short form; `python tests/process/faults.py` goes through every process with every fault and prints the times.
"""

from collections.abc import Iterator

import pytest
from faults import Bench, live_bench

pytestmark = pytest.mark.timeout(300)
DEADLINE_S = 20.0  # of a loaded test machine; the times themselves are the long form's
TURNS = [
    ("proxy", "kill"), ("ingest", "kill"), ("band:main", "kill"), ("contacts", "kill"), ("serve", "kill"),
    ("ingest", "stop"), ("band:main", "spin"), ("proxy", "stop"),
    ("band:low", "kill"), ("band:low", "kill"), ("band:low", "kill"),
]  # fmt: skip


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Bench]:
    with live_bench(tmp_path_factory.mktemp("faults")) as bench:
        yield bench


def test_every_process_comes_back_and_its_neighbours_miss_nothing(bench: Bench) -> None:
    """Breaks in a map's samples are flagged (checked in `hurt`), and only the proxy may cost messages."""
    restarts = dict.fromkeys(bench.names(), 0)
    for name, fault in TURNS:
        outcome = bench.hurt(name, fault, DEADLINE_S)
        restarts[name] += 1
        if name != "proxy":
            assert not any(outcome.holes.values()), outcome
    assert {p["name"]: p["restarts"] for p in bench.status()["processes"]} == restarts
    bench.counters_are_exact()
