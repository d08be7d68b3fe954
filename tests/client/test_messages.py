"""Frames -> values."""

import pickle
from datetime import UTC, datetime

import msgpack
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose_client import MapMessage, Message, MessageError, UsageError, decode, rfc3339

#: a map as bytes on the wire, version 1, written out by hand from the msgpack specification
RECORDED_HEADER = bytes.fromhex(
    "8b"  # map of 11
    "a176" "01"  # v: 1
    "a46b696e64" "a36d6170"  # kind: map
    "a56172726179" "a3616674"  # array: aft
    "a3736571" "07"  # seq: 7
    "a57374617274" "b030303030303030303030303030306666"  # start: 00000000000000ff
    "a174" "cf18ed1e6d9bd80000"  # t, uint64
    "a5745f656e64" "cf18ed1e6daaebd400"  # t_end, uint64
    "a57368617065" "920201"  # shape: [2, 1]
    "a8636f6e655f646567" "92cb0000000000000000cb4066800000000000"  # cone_deg: [0.0, 180.0]
    "a566305f687a" "cb4049000000000000"  # f0_hz: 50.0
    "a564665f687a" "02"  # df_hz: 2, an integer will do
)  # fmt: skip


def test_map_of_recorded_bytes_is_read():
    message = decode([b"map/main", RECORDED_HEADER, bytes.fromhex("0000c8420000a0c1")])
    assert isinstance(message, MapMessage)
    assert message.level_db.tolist() == [[100.0], [-20.0]]
    assert message.cone_deg.tolist() == [0.0, 180.0]
    assert (message.seq, message.start, message.array, message.band) == (7, "00000000000000ff", "aft", "main")
    assert message.t_ns == 0x18ED1E6D9BD80000
    assert message.frequency_hz.tolist() == [50.0]
    assert (message.limits, message.latency_ms, message.missed, message.skipped) == ({}, None, 0, 0)


def test_map_has_axes_and_is_read_only(make_map):
    message = decode(make_map(seq=3))
    assert message.frequency_hz.tolist() == [50.0, 52.5, 55.0, 57.5]
    assert message.cos == pytest.approx([1.0, 0.0, -1.0], abs=1e-15)
    assert message.level_db.dtype == np.float32
    assert message.t_end_ns - message.t_ns == 256_000_000
    assert message.run == "r"
    assert message.limits["channels_used"] == 48
    assert message.latency_ms == 12.5
    assert message.time == "2026-12-01T14:00:00.000000Z"
    for axis in (message.level_db, message.cone_deg, message.cos, message.frequency_hz):
        with pytest.raises(ValueError, match="read-only"):
            axis[..., 0] = 0


def test_unknown_keys_and_kinds_are_kept(make_map, make_plain):
    assert decode(make_map(future={"a": [1]})).header["future"] == {"a": [1]}
    message = decode([*make_plain("weather", t=5, wind_m_s=9.5), b"raw"])
    assert type(message) is Message
    assert (message.kind, message.t_ns, message.data) == ("weather", 5, b"raw")
    assert message.time == "1970-01-01T00:00:00.000000Z"
    assert decode(make_plain("status")).time is None
    assert decode(make_plain("status", t=True)).t_ns is None


def test_spectrum_and_level_are_of_nearest_beam_in_cosine(make_map):
    message = decode(make_map())
    assert message.spectrum(61.0).tolist() == [4.0, 5.0, 6.0, 7.0]  # cos 0.485: nearer to 0 than to 1
    assert message.spectrum(59.0).tolist() == [0.0, 1.0, 2.0, 3.0]
    assert message.at(180.0, 52.4) == 9.0
    assert message.at(180.0, 58.7) == 11.0


def test_loudest_beam_sums_power_in_the_band_asked_for(make_map):
    levels = [[80.0, 10, 10, 60], [70, 70, 10, 10], [10, 10, 73, 73]]
    message = decode(make_map(level_db=levels))
    assert message.loudest().beam == 0
    assert message.loudest(52.0, 53.0).cone_deg == 90.0
    loudest = message.loudest(55.0)
    assert loudest.cone_deg == 180.0
    # two bins of 2.5 Hz at 73 dB: 73 + 10 log10(5) dB re 1 uPa
    assert loudest.level_db == pytest.approx(73 + 10 * np.log10(5.0), abs=1e-6)


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda m: m.spectrum(-1), "from 0"),
        (lambda m: m.spectrum(float("nan")), "from 0"),
        (lambda m: m.at(90, 48.0), "from 50 to 57.5 Hz"),
        (lambda m: m.at(90, 59.0), "from 50 to 57.5 Hz"),
        (lambda m: m.loudest(60.0), "no bin"),
    ],
)
def test_asking_beyond_the_map_says_what_it_covers(make_map, call, word):
    with pytest.raises(UsageError, match=word):
        call(decode(make_map()))


@pytest.mark.parametrize(
    ("keys", "reason"),
    [
        ({"v": 2}, "version"),
        ({"v": True}, "key"),
        ({"kind": 5}, "key"),
        ({"array": None}, "key"),
        ({"start": 5}, "key"),
        ({"seq": -1}, "key"),
        ({"seq": 1.0}, "key"),
        ({"t": 1.5}, "key"),
        ({"t_end": None}, "key"),
        ({"f0_hz": float("nan")}, "key"),
        ({"df_hz": 0}, "key"),
        ({"shape": 5}, "key"),
        ({"shape": [3]}, "shape"),
        ({"shape": [3, 4.0]}, "shape"),
        ({"shape": [0, 4]}, "shape"),
        ({"shape": [3, 5]}, "bytes"),
        ({"cone_deg": [0.0, 90.0]}, "shape"),
        ({"cone_deg": [0.0, "90", 180.0]}, "shape"),
        ({"cone_deg": [0.0, float("inf"), 180.0]}, "key"),
    ],
)
def test_map_that_cannot_be_read_gives_its_reason(make_map, keys, reason):
    with pytest.raises(MessageError) as caught:
        decode(make_map(**keys))
    assert caught.value.reason == reason


@pytest.mark.parametrize(
    ("parts", "reason"),
    [
        ([b"map/main"], "frames"),
        ([b"a", b"b", b"c", b"d"], "frames"),
        ([b"map/\xff", b"\x80"], "frames"),
        ([b"map/main", b"\xc1"], "msgpack"),
        ([b"map/main", b"\x80\x80"], "msgpack"),
        ([b"map/main", b"\x91\x01"], "msgpack"),
        ([b"map/main", b"\x81\x01\x01"], "msgpack"),
        ([b"map/main", b"\x91" * 5000], "msgpack"),
        ([b"map/main", msgpack.packb({"v": 1, "x": b"0" * (1 << 20)})], "msgpack"),
        ([b"map/main", b"\x80"], "key"),
    ],
)
def test_frames_that_are_no_message_give_their_reason(parts, reason):
    with pytest.raises(MessageError) as caught:
        decode(parts)
    assert caught.value.reason == reason


@pytest.mark.parametrize("data", [b"", bytes(44), bytes(47), bytes(49), bytes(52), bytes(96)])
def test_map_with_too_few_or_too_many_bytes_is_refused(make_map, data):
    """3 x 4 levels of 4 bytes are 48."""
    with pytest.raises(MessageError, match="bytes"):
        decode([*make_map()[:2], data])


def test_message_error_survives_pickling():
    error = pickle.loads(pickle.dumps(MessageError("shape", "why")))
    assert (error.reason, error.detail, str(error), error.code) == ("shape", "why", "shape: why", "message")


@given(st.integers(1, 6), st.integers(1, 9), st.floats(0, 1e6), st.floats(1e-3, 1e3), st.integers(0, 2**62), st.data())
def test_any_map_comes_back_as_it_was(beams, bins, f0_hz, df_hz, t_ns, data):
    levels = data.draw(st.lists(st.floats(width=32), min_size=beams * bins, max_size=beams * bins))
    cone = data.draw(st.lists(st.floats(0, 180), min_size=beams, max_size=beams))
    header = {
        "v": 1, "kind": "map", "array": "a", "seq": 0, "start": "s", "t": t_ns, "t_end": t_ns, "shape": [beams, bins],
        "cone_deg": cone, "f0_hz": f0_hz, "df_hz": df_hz,
    }  # fmt: skip
    raw = np.array(levels, "<f4").tobytes()
    message = decode([b"map/x", msgpack.packb(header), raw])
    assert isinstance(message, MapMessage)
    assert message.level_db.tobytes() == raw
    assert (message.level_db.shape, message.cone_deg.tolist(), dict(message.header)) == ((beams, bins), cone, header)


REASONS = ("frames", "msgpack", "version", "key", "shape", "bytes")


def outcome(parts):
    """Reason of the refusal, or "read"; any other exception is a failure of the test."""
    try:
        return decode(parts).kind and "read"
    except MessageError as error:
        return error.reason


@given(st.data())
def test_mangled_bytes_are_refused_or_read_but_never_break(data):
    parts = [b"map/main", RECORDED_HEADER, bytes(8)]
    which = data.draw(st.integers(0, 2))
    part = bytearray(parts[which])
    for _ in range(data.draw(st.integers(1, 4))):
        place = data.draw(st.integers(0, len(part) - 1))
        part[place] = data.draw(st.integers(0, 255))
    parts[which] = bytes(part[: data.draw(st.integers(0, len(part)))])
    assert outcome(parts) in {"read", *REASONS}


@given(st.lists(st.binary(max_size=60), max_size=4))
def test_any_bytes_are_refused_or_read_but_never_break(parts):
    assert outcome(parts) in {"read", *REASONS}


@given(st.integers(-62_135_596_800_000_000_000, 253_402_300_799_999_999_999))
def test_time_as_text_keeps_microseconds(t_ns):
    text = rfc3339(t_ns)
    moment = datetime.fromisoformat(text)
    since = moment - datetime(1970, 1, 1, tzinfo=UTC)
    micro = (since.days * 86400 + since.seconds) * 1_000_000 + since.microseconds
    assert (len(text), micro) == (27, t_ns // 1000)


@pytest.mark.parametrize("t_ns", [-(2**70), 2**70])
def test_time_outside_the_calendar_is_refused(t_ns):
    with pytest.raises(UsageError, match="1 to 9999"):
        rfc3339(t_ns)
