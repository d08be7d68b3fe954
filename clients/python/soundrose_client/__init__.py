"""core: the public face of the client: subscribe to maps and events, ask over HTTP, follow live, or act as an array.

Needs pyzmq, msgpack and numpy alone, and nothing of the service; the live socket needs websockets besides.
"""

from soundrose_client.errors import (
    ClientError,
    MessageError,
    ReceiveTimeout,
    SendTimeout,
    ServiceError,
    Unreachable,
    UsageError,
)
from soundrose_client.events import Event
from soundrose_client.http import EventPages, Service, Spectrum
from soundrose_client.live import AsyncLive, Live
from soundrose_client.live_session import LiveCounters, LiveSession, read_map
from soundrose_client.messages import Loudest, MapMessage, Message, decode, rfc3339
from soundrose_client.reader import Counters, Hole, Mailbox, Reader
from soundrose_client.source import Source
from soundrose_client.subscriber import AsyncSubscriber, Subscriber

__all__ = [
    "AsyncLive", "AsyncSubscriber", "ClientError", "Counters", "Event", "EventPages", "Hole", "Live", "LiveCounters",
    "LiveSession", "Loudest", "Mailbox", "MapMessage", "Message", "MessageError", "Reader", "ReceiveTimeout",
    "SendTimeout", "Service", "ServiceError", "Source", "Spectrum", "Subscriber", "Unreachable", "UsageError", "decode",
    "read_map", "rfc3339",
]  # fmt: skip
