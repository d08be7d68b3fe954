"""process: the shared record: a small memory file that outlives the ingest process and keeps its count."""

import mmap
import os
import struct
import zlib

__all__ = ["RECORD_BYTES", "SharedRecord", "make_record_file"]

_SLOT_BYTES = 64 * 1024
RECORD_BYTES = 2 * _SLOT_BYTES
_LOOKS = 100  #: a writer that is at both slots while one is read is away from one the next moment
_HEAD = struct.Struct("<QII")  # write number, payload length, CRC-32 of the payload


def make_record_file() -> int:
    """Descriptor of a new, empty record in memory (Linux). The supervisor owns it; ingest inherits it."""
    descriptor = os.memfd_create("soundrose-record")
    os.ftruncate(descriptor, RECORD_BYTES)
    return descriptor


class SharedRecord:
    """One writer, any readers, never a torn value.

    Two slots written in turn, each with a number and a checksum: a writer killed half way through leaves the other
    slot, and a reader that meets a slot being written takes the other too.
    """

    def __init__(self, descriptor: int) -> None:
        self._map = mmap.mmap(descriptor, RECORD_BYTES)
        self._number = max(self._slot(0)[0], self._slot(1)[0])
        self._read = b""

    def _slot(self, which: int) -> tuple[int, bytes]:
        offset = which * _SLOT_BYTES
        number, length, crc = _HEAD.unpack_from(self._map, offset)
        if number == 0 or length > _SLOT_BYTES - _HEAD.size:
            return 0, b""
        start = offset + _HEAD.size
        payload = self._map[start : start + length]
        return (number, payload) if zlib.crc32(payload) == crc else (0, b"")

    def write(self, payload: bytes) -> None:
        """Replace the value. ValueError if it is longer than a slot."""
        if len(payload) > _SLOT_BYTES - _HEAD.size:
            raise ValueError(f"record of {len(payload)} bytes; at most {_SLOT_BYTES - _HEAD.size} fit")
        self._number += 1
        offset = (self._number % 2) * _SLOT_BYTES
        start = offset + _HEAD.size
        _HEAD.pack_into(self._map, offset, 0, 0, 0)  # a reader sees "nothing here" until the head is written
        self._map[start : start + len(payload)] = payload
        _HEAD.pack_into(self._map, offset, self._number, len(payload), zlib.crc32(payload))

    def read(self) -> bytes:
        """The newest whole value; b"" if none was ever written.

        A reader that is held up between the slots may find the writer first at the one, then at the other: it looks
        again, and in the end takes what it read last.
        """
        for _ in range(_LOOKS):
            newest = max(self._slot(0), self._slot(1))
            if newest[0]:
                self._read = newest[1]
                break
        return self._read

    def close(self) -> None:
        self._map.close()
