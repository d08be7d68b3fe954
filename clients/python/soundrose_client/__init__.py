"""core: the public face of the client: subscribe to maps and events, or act as an array.

Needs pyzmq, msgpack and numpy alone, and nothing of the service.
"""

from soundrose_client.errors import ClientError, MessageError, ReceiveTimeout, SendTimeout, UsageError
from soundrose_client.messages import Loudest, MapMessage, Message, decode, rfc3339
from soundrose_client.reader import Counters, Hole, Mailbox, Reader
from soundrose_client.source import Source
from soundrose_client.subscriber import AsyncSubscriber, Subscriber

__all__ = [
    "AsyncSubscriber", "ClientError", "Counters", "Hole", "Loudest", "Mailbox", "MapMessage", "Message", "MessageError",
    "Reader", "ReceiveTimeout", "SendTimeout", "Source", "Subscriber", "UsageError", "decode", "rfc3339",
]  # fmt: skip
