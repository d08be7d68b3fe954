"""codec: commands to contacts and their answers, and what a command may say."""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import msgpack

from soundrose.errors import WireError

__all__ = ["COMMAND_BYTES", "Answer", "Command", "decode_answer", "decode_command", "encode_answer", "encode_command",
           "note_payload"]  # fmt: skip

COMMAND_BYTES = 64 * 2**10
ID_CHARACTERS = 128
BY_CHARACTERS, NOTE_CHARACTERS = 64, 2000
_VERSION = 1


@dataclass(frozen=True, slots=True)
class Command:
    """Something to be done once. id : chosen by the asker, the same when it asks again; name, arguments : what."""

    id: str
    name: str
    arguments: Mapping[str, Any]


@dataclass(frozen=True, slots=True)
class Answer:
    """id : that of the command.  status : as of HTTP.  body : the result, or {"detail"} of an error."""

    id: str
    status: int
    body: Mapping[str, Any]


def encode_command(command: Command) -> bytes:
    plain = {"v": _VERSION, "id": command.id, "command": command.name, "arguments": dict(command.arguments)}
    return bytes(msgpack.packb(plain))


def decode_command(data: bytes) -> Command:
    """Raises WireError("command") for what is none."""
    plain = _unpacked(data)
    name, arguments = plain.get("command"), plain.get("arguments")
    if not isinstance(name, str) or not isinstance(arguments, dict):
        raise WireError("command", "`command` must be a text and `arguments` a map")
    return Command(_id(plain), name, arguments)


def encode_answer(answer: Answer) -> bytes:
    return bytes(msgpack.packb({"v": _VERSION, "id": answer.id, "status": answer.status, "body": dict(answer.body)}))


def decode_answer(data: bytes) -> Answer:
    """Raises WireError("command") for what is none."""
    plain = _unpacked(data)
    status, body = plain.get("status"), plain.get("body")
    if not isinstance(status, int) or not 200 <= status <= 599 or not isinstance(body, dict):
        raise WireError("command", "`status` must be from 200 to 599 and `body` a map")
    return Answer(_id(plain), status, body)


def note_payload(arguments: Mapping[str, Any]) -> dict[str, str]:
    """The payload of a `note` event. Raises WireError("note") that says what was wrong."""
    by, text = arguments.get("by"), arguments.get("note")
    if not _is_text(by, BY_CHARACTERS):
        raise WireError("note", f"`by` must be a text of 1 to {BY_CHARACTERS} characters that is not blank")
    if not _is_text(text, NOTE_CHARACTERS):
        raise WireError("note", f"`note` must be a text of 1 to {NOTE_CHARACTERS} characters that is not blank")
    return {"by": str(by), "text": str(text)}


def _is_text(value: Any, most: int) -> bool:
    """A text that UTF-8 can hold, without control characters but line ends and tabs."""
    if not isinstance(value, str) or not value.strip() or len(value) > most:
        return False
    return not any((ord(c) < 32 and c not in "\n\r\t") or ord(c) == 127 or 0xD800 <= ord(c) <= 0xDFFF for c in value)


def _unpacked(data: bytes) -> dict[str, Any]:
    if len(data) > COMMAND_BYTES:
        raise WireError("command", f"{len(data)} bytes; a command or answer may have {COMMAND_BYTES}")
    try:
        plain = msgpack.unpackb(data)
    except (ValueError, TypeError, RecursionError, msgpack.UnpackException) as error:
        raise WireError("command", f"cannot be read: {error!r}") from error
    if not isinstance(plain, dict) or plain.get("v") != _VERSION:
        raise WireError("command", f"must be a map with `v` {_VERSION}")
    return plain


def _id(plain: Mapping[str, Any]) -> str:
    value = plain.get("id")
    if not isinstance(value, str) or not 1 <= len(value) <= ID_CHARACTERS:
        raise WireError("command", f"`id` must be a text of 1 to {ID_CHARACTERS} characters")
    return value
