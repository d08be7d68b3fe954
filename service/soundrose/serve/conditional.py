"""core: entity tags: what names an answer, and whether a client already has it (RFC 9110, 8.8.3 and 13.1.2)."""

import re
from collections.abc import Iterable
from hashlib import blake2s
from typing import Any

__all__ = ["content_tag", "is_known", "reduction_tag"]

_TAG = re.compile(r'(?:W/)?"([\x21\x23-\x7e\x80-\xff]*)"')


def reduction_tag(start: str, seq: int, asked: Iterable[Any]) -> str:
    """The tag of one answer made of one published message: "start-seq-hash of reduction", in quotes.

    asked : everything that changes the bytes of the answer, defaults filled in: the same map in another format or
    size is another representation and has another tag.
    """
    return f'"{start}-{seq}-{_digest(repr(tuple(asked)).encode())}"'


def content_tag(body: bytes) -> str:
    """The tag of an answer that is named by its bytes alone."""
    return f'"{_digest(body)}"'


def is_known(tag: str, if_none_match: Iterable[str]) -> bool:
    """Whether the values of If-None-Match (one per header line) name `tag`.

    The comparison is the weak one, as RFC 9110 13.1.2 asks: W/ is passed over. `*` matches whatever there is. What
    is no list of entity tags matches nothing, so that the answer is sent.
    """
    for line in if_none_match:
        if line.strip() == "*":
            return True
        left = _TAG.sub("", line)
        if not left.replace(",", "").strip() and tag.strip('"') in _TAG.findall(line):
            return True
    return False


def _digest(data: bytes) -> str:
    return blake2s(data, digest_size=6).hexdigest()
