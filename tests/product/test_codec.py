"""Published messages: envelope, numbering and bytes."""

import msgpack
import numpy as np
import pytest

from soundrose.errors import WireError
from soundrose.product.codec import Envelope, decode_published, encode_map, encode_plain, rfc3339
from soundrose.product.messages import MapProduct


def make_map() -> MapProduct:
    levels = np.arange(6, dtype=np.float32).reshape(2, 3)
    return MapProduct({"band": "main", "t": 1, "t_end": 2, "shape": [2, 3]}, levels, 5)


def test_map_is_topic_map_and_little_endian_levels():
    topic, packed, data = encode_map(Envelope("aft", "0" * 16), make_map(), 3.25)
    header = msgpack.unpackb(packed)
    assert topic == b"map/main"
    assert header["v"] == 1
    assert (header["kind"], header["array"], header["seq"], header["start"]) == ("map", "aft", 0, "0" * 16)
    assert header["latency_ms"] == 3.25
    np.testing.assert_array_equal(np.frombuffer(data, "<f4").reshape(header["shape"]), make_map().level_db)


def test_seq_counts_per_topic():
    envelope = Envelope("aft", "0" * 16)
    seqs = [decode_published(encode_plain(envelope, topic, {}))[1]["seq"] for topic in ("a", "b", "a", "a", "b")]
    assert seqs == [0, 0, 1, 2, 1]


@pytest.mark.parametrize("parts", [[], [b"a"], [b"a", b"\xc1"], [b"\xff", b"\x80"], [b"a", b"\x01"]])
def test_anything_else_is_refused(parts):
    with pytest.raises(WireError):
        decode_published(parts)


def test_time_text_is_rfc_3339_utc_with_microseconds():
    """RFC 3339 section 5.6; the instant counted by hand: 2026-12-01T15:20:00Z is 1796138400 s after 1970."""
    assert rfc3339(1_796_138_400_000_000_000) == "2026-12-01T15:20:00.000000Z"
    assert rfc3339(1_796_138_400_123_456_999) == "2026-12-01T15:20:00.123456Z"
    assert rfc3339(0) == "1970-01-01T00:00:00.000000Z"
