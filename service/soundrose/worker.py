"""process: `python -m soundrose child N`: reads its orders and becomes the process they name."""

import sys
from collections.abc import Callable

from soundrose.child import Orders
from soundrose.errors import StartError

__all__ = ["EXIT_START", "run_child"]

EXIT_START = 3


def run_child(descriptor: int) -> int:
    """Run the process that the orders in `descriptor` name. Returns its exit status, 3 if it cannot start here."""
    orders = Orders.read(descriptor)
    try:
        return _entry(orders.name)(orders)
    except StartError as error:
        print(f"soundrose: {error}", file=sys.stderr, flush=True)
        return EXIT_START


def _entry(name: str) -> Callable[[Orders], int]:
    """The main function of a process; each imports only what it needs, so that a restart is quick."""
    match name.split(":")[0]:
        case "proxy":
            from soundrose.product.proxy import main
        case "ingest":
            from soundrose.feed.process import main
        case "band":
            from soundrose.beam.process import main
        case "contacts":
            from soundrose.contact.process import main
        case "serve":
            from soundrose.serve.process import main
        case _:
            raise StartError(f"no process is called {name!r}")
    return main
