"""core: what the client raises on purpose."""

from collections.abc import Mapping
from typing import Any

__all__ = [
    "ClientError", "MessageError", "ReceiveTimeout", "SendTimeout", "ServiceError", "Unreachable", "UsageError",
]  # fmt: skip


class ClientError(Exception):
    """Base of every error of this package. `code` is short and stable; the text may improve."""

    code = "client"


class UsageError(ClientError, ValueError):
    """The caller asked for something that cannot be: the text says what was got and what is allowed."""

    code = "usage"


class MessageError(ClientError, ValueError):
    """A message that cannot be read. A subscriber counts it and goes on; only `decode` raises it.

    reason : `frames`, `msgpack`, `version`, `key`, `shape` or `bytes`.
    """

    code = "message"

    def __init__(self, reason: str, detail: str) -> None:
        self.reason, self.detail = reason, detail
        super().__init__(f"{reason}: {detail}")

    def __reduce__(self) -> tuple[type["MessageError"], tuple[str, str]]:
        return type(self), (self.reason, self.detail)


class ReceiveTimeout(ClientError, TimeoutError):
    """Nothing came in the time allowed."""

    code = "receive-timeout"


class SendTimeout(ClientError, TimeoutError):
    """Nobody took what was to be sent in the time allowed."""

    code = "send-timeout"


class Unreachable(ClientError, ConnectionError):
    """Nothing answers at the address, or what answered broke off."""

    code = "unreachable"


class ServiceError(ClientError):
    """The service answered with an error.

    status : of HTTP, or of an error frame of the live socket.  detail : what was got and what is allowed.
    problem : the whole error object.
    """

    code = "service"

    def __init__(self, status: int, detail: str, problem: Mapping[str, Any] | None = None) -> None:
        self.status, self.detail, self.problem = status, detail, dict(problem or {})
        super().__init__(f"{status}: {detail}")

    def __reduce__(self) -> tuple[type["ServiceError"], tuple[int, str, dict[str, Any]]]:
        return type(self), (self.status, self.detail, self.problem)
