"""core: hands what the service publishes and logs to every live client, each frame made once."""

from collections.abc import Mapping, Sequence
from typing import Any

from soundrose._version import __version__
from soundrose.product.messages import VERSION
from soundrose.serve.latest import Latest, Message
from soundrose.serve.live_client import BandMap, LiveClient, MapCounter
from soundrose.serve.live_frames import MapFrames, object_frame, text_frame
from soundrose.serve.live_request import STATE_TOPICS, Reduction
from soundrose.serve.plain import plain

__all__ = ["CLIENTS_MOST", "Hub"]

CLIENTS_MOST = 256
_ALERTS_MOST = 256


class Hub:
    """The live clients, and what they have in common.

    bands : names in the order of the settings.  logged : events come from the log by `on_events`; without a log the
    published detections and alerts are handed on as they come, and nothing can be caught up.
    """

    def __init__(self, latest: Latest, bands: Sequence[str], *, logged: bool) -> None:
        self._latest, self._bands, self._logged = latest, tuple(bands), logged
        self.clients: set[LiveClient] = set()
        self._counters = {band: MapCounter() for band in bands}
        self._newest: dict[str, BandMap] = {}
        self._frames = {band: MapFrames() for band in bands}
        self._alerts: dict[str, str] = {}  # id -> text, those not `normal`
        for band in bands:
            message = latest.get(f"map/{band}")
            if message is not None:
                self._newest[band] = self._counters[band].count(message)

    @property
    def full(self) -> bool:
        return len(self.clients) >= CLIENTS_MOST

    def hello(self, cursor: str | None) -> str:
        """The first frame. cursor : events after it reach a client that asks for them with `since`."""
        status = self._latest.get("status")
        started = {} if status is None else {"service_start": status.header.get("service_start")}
        head = {"kind": "hello", "v": VERSION, "version": __version__, "service_start": None}
        return object_frame(plain({**head, **started, "bands": list(self._bands), "cursor": cursor}))

    def on_message(self, message: Message) -> None:
        """Hand on a published message."""
        topic = message.topic
        if topic.startswith("map/"):
            self._on_map(topic.removeprefix("map/"), message)
        elif topic in STATE_TOPICS:
            self._to_all(topic, message, event=False)
        elif topic in ("detection", "alert"):
            if topic == "alert":
                self._note_alert(message)
            if not self._logged:
                self._to_all(topic, message, event=True)

    def on_events(self, items: Sequence[Mapping[str, Any]]) -> None:
        """Hand on new events of the log, in its order."""
        followers = [client for client in self.clients if client.follows]
        if not followers:
            return
        for item in items:
            text = object_frame(item)
            for client in followers:
                client.offer_event(item["kind"], text)

    def greet(self, client: LiveClient) -> None:
        """Offer a client that has just asked what is newest of all that it asked for."""
        for topic in STATE_TOPICS:
            message = self._latest.get(topic)
            if message is not None and topic in client.request.topics:
                client.offer_state(topic, text_frame(message))
        for name, text in self._alerts.items():
            client.offer_state("alert", text, f"alert/{name}")
        for band in client.request.bands:
            if band in self._newest:
                client.offer_map(band, self._newest[band], at_once=True)

    def frame(self, found: BandMap, reduction: Reduction, skipped: int) -> bytes:
        """A map as a client asked for it. Raises UsageError where nothing of it is left."""
        return self._frames[found.message.header["band"]].frame(found.message, reduction, skipped)

    def _on_map(self, band: str, message: Message) -> None:
        if band not in self._counters:
            return
        found = self._newest[band] = self._counters[band].count(message)
        for client in self.clients:
            client.offer_map(band, found)

    def _to_all(self, topic: str, message: Message, *, event: bool) -> None:
        interested = [client for client in self.clients if topic in client.request.topics]
        text = text_frame(message) if interested else ""
        for client in interested:
            if event:
                client.offer_event(topic, text)
            else:
                client.offer_state(topic, text)

    def _note_alert(self, message: Message) -> None:
        name = str(message.header.get("id"))
        if message.header.get("state") == "normal":
            self._alerts.pop(name, None)
        elif name in self._alerts or len(self._alerts) < _ALERTS_MOST:
            self._alerts[name] = text_frame(message)
