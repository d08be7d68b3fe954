"""core: every stage chained in one process, without sockets: offline work, tests, and programs that embed soundrose."""

from collections.abc import Iterable, Iterator, Sequence

from soundrose.beam.stage import BandStage
from soundrose.feed.hop import Hop, RunEnd
from soundrose.feed.intake import Intake
from soundrose.product.messages import HealthProduct, Product
from soundrose.settings_types import Settings

__all__ = ["Pipeline"]


class Pipeline:
    """Feed messages in, products out.

    The same samples, settings, library versions and CPU type give the same bits as the live service in `hold`
    (and in `drop` while no band falls behind); `seq`, `start` and `latency_ms` are the sender's and not in them.

    Parameters
    ----------
    settings : as read by `load_settings`. Nothing is listened to and nothing is written.

    Examples
    --------
    >>> pipeline = Pipeline(load_settings("aft.toml"))                      # doctest: +SKIP
    >>> for product in pipeline.push([header_bytes, sample_bytes]):         # doctest: +SKIP
    ...     print(product.topic, product.header["t"])
    """

    def __init__(self, settings: Settings) -> None:
        self.settings = settings
        self.intake = Intake(settings)
        self.bands = {band.name: BandStage(settings, band) for band in settings.bands}

    def push(self, parts: Sequence[bytes | memoryview]) -> list[Product]:
        """Take one feed message (its one or two frames) and return what it completes, in order of time.

        A message that cannot be used is counted in `intake.counters` and changes nothing, as in the service.
        """
        products: list[Product] = []
        for outcome in self.intake.push(parts):
            match outcome:
                case Hop():
                    for stage in self.bands.values():
                        products.extend(stage.push(outcome))
                case HealthProduct():
                    products.append(outcome)
                case RunEnd():
                    pass  # the epoch of the next hop says it to the bands
                case _:
                    for stage in self.bands.values():
                        stage.note(outcome)
        return products

    def run(self, messages: Iterable[Sequence[bytes | memoryview]]) -> Iterator[Product]:
        """Every product of a stream of feed messages."""
        for parts in messages:
            yield from self.push(parts)
