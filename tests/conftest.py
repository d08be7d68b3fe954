"""What holds for every test: one BLAS thread, no deadline in property tests, and layers by folder.

Layers run in this order: core (objects and sockets inside the test's own process), reference (published values),
process (the service or its parts as processes of their own), browser (the display in Chromium). A test marked `speed`
runs only when asked for.
A hang is cut by the timeout in pyproject.toml, ten seconds after the stacks of all threads have been written.
"""

import os
import sys
import time
from collections.abc import Iterator
from pathlib import Path

for _name in ("OPENBLAS_NUM_THREADS", "OMP_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ[_name] = "1"
assert "numpy" not in sys.modules, "numpy was imported before its threads were set: its pool is made at import"

import pytest  # noqa: E402
from hypothesis import settings  # noqa: E402

LAYERS = ("core", "reference", "process", "browser")
PROCESS_FOLDERS = frozenset({"process", "supervise", "pipeline"})
HERE = Path(__file__).parent

settings.register_profile("house", deadline=None, print_blob=True)  # no deadline: the machine may be busy
settings.load_profile("house")


def layer_of(path: Path) -> str:
    """The layer of a test file: by the folder it stands in."""
    room = path.relative_to(HERE).parts[0]
    if room in PROCESS_FOLDERS:
        return "process"
    return room if room in ("reference", "browser") else "core"


def pytest_collection_modifyitems(items: list[pytest.Item]) -> None:
    """Marks each test with its layer and brings the layers into order; inside one nothing moves."""
    layers = {item: layer_of(item.path) for item in items}
    for item, layer in layers.items():
        item.add_marker(getattr(pytest.mark, layer))
    items.sort(key=lambda item: LAYERS.index(layers[item]))


class LayerClock:
    """Wall time and count of each layer; shown before the closing line."""

    def __init__(self) -> None:
        self.seconds: dict[str, float] = {}
        self.tests: dict[str, int] = {}

    @pytest.hookimpl(wrapper=True)
    def pytest_runtest_protocol(self, item: pytest.Item) -> Iterator[None]:
        layer, began = layer_of(item.path), time.monotonic()
        try:
            return (yield)
        finally:
            self.seconds[layer] = self.seconds.get(layer, 0.0) + time.monotonic() - began
            self.tests[layer] = self.tests.get(layer, 0) + 1

    def pytest_terminal_summary(self, terminalreporter: pytest.TerminalReporter) -> None:
        for layer, seconds in self.seconds.items():
            terminalreporter.write_line(f"layer {layer}: {self.tests[layer]} tests in {seconds:.1f} s")


def pytest_configure(config: pytest.Config) -> None:
    config.pluginmanager.register(LayerClock(), "layer-clock")
