"""Feed messages: what was encoded comes back; whatever else comes is refused under the first reason that applies."""

import math
import pickle
import tracemalloc

import msgpack
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from soundrose.errors import UsageError, WireError
from soundrose.feed.hop import Navigation, Positions, Pulse
from soundrose.feed.messages import (
    DATA_LIMIT,
    HEADER_LIMIT,
    REASONS,
    Expected,
    RunEndMessage,
    Samples,
    decode,
    encode_end,
    encode_navigation,
    encode_positions,
    encode_pulse,
    encode_samples,
)

EXPECTED = Expected("aft", 3, 1000.0)
T = 1_796_133_600 * 10**9
HEADER = {
    "v": 1, "kind": "samples", "array": "aft", "run": "r", "first": 10, "t": T, "rate": 1000.0, "shape": [3, 4],
    "layout": "channel", "type": "i2", "unit": "count",
}  # fmt: skip
DATA = bytes(24)
NAVIGATION = {"v": 1, "kind": "navigation", "array": "aft", "t": T}
POSITIONS = {"v": 1, "kind": "positions", "array": "aft", "t": T, "positions_m": [[0.0, 1.0, 2]] * 3}
PULSE = {"v": 1, "kind": "pulse", "array": "aft", "t": T, "source": "gun", "length_s": 0.2}
END = {"v": 1, "kind": "end", "array": "aft", "run": "r"}
GONE = object()


def parts(base, **keys):
    header = {key: value for key, value in (base | keys).items() if value is not GONE}
    return [msgpack.packb(header), DATA] if base is HEADER else [msgpack.packb(header)]


def reason(message):
    with pytest.raises(WireError) as caught:
        decode(message, EXPECTED)
    assert caught.value.detail
    return caught.value.reason


def test_good_messages_of_the_tests_are_good():
    for base in (HEADER, NAVIGATION, POSITIONS, PULSE, END):
        decode(parts(base), EXPECTED)


# -- round trip ------------------------------------------------------------------------------------------------------


@given(
    run=st.text(max_size=30), first=st.integers(0, 2**53 - 1), t=st.integers(0, 2**63 - 1),
    samples=st.integers(1, 40), layout=st.sampled_from(["channel", "sample"]),
    kind=st.sampled_from(["i2", "i3", "i4"]), seed=st.integers(0, 99),
)  # fmt: skip
def test_integer_samples_come_back(run, first, t, samples, layout, kind, seed):
    half = {"i2": 2**15, "i3": 2**23, "i4": 2**31}[kind]
    values = np.random.default_rng(seed).integers(-half, half, (3, samples))
    header, data = encode_samples("aft", run, first, t, 1000.0, values, type=kind, layout=layout)
    got = decode([header, memoryview(data)], EXPECTED)
    assert got[:-1] == (run, first, t, 3, samples, layout, kind, "count")
    width = int(kind[1])
    plain = [int.from_bytes(got.data[i : i + width], "little", signed=True) for i in range(0, len(data), width)]
    shape = (3, samples) if layout == "channel" else (samples, 3)
    back = np.array(plain).reshape(shape)
    np.testing.assert_array_equal(back if layout == "channel" else back.T, values)


@given(
    unit=st.sampled_from(["count", "V", "uPa"]),
    values=st.lists(st.floats(width=32, allow_nan=True, allow_infinity=True), min_size=3, max_size=60),
)
def test_float_samples_come_back_bit_by_bit(unit, values):
    block = np.array(values[: len(values) // 3 * 3], np.float32).reshape(3, -1)
    message = decode(encode_samples("aft", "", 0, 0, 1000, block, unit=unit), EXPECTED)
    assert message.unit == unit
    assert message.data == block.astype("<f4").tobytes()


@given(
    t=st.integers(0, 2**63 - 1), of=st.sampled_from(["array", "ship"]),
    values=st.fixed_dictionaries({}, optional={
        "latitude_deg": st.floats(-90, 90), "longitude_deg": st.floats(-180, 360), "heading_deg": st.floats(0, 360),
        "heading_sigma_deg": st.floats(0, 1e9), "heading_from": st.text(max_size=9), "pitch_deg": st.floats(-90, 90),
        "depth_m": st.floats(-1e4, 1e4), "speed_m_s": st.floats(0, 1e3), "course_deg": st.integers(0, 360),
        "sound_speed_m_s": st.floats(50, 20000), "speed_through_water_m_s": st.floats(-30, 30),
        "water_depth_m": st.floats(0, 12000), "cable_out_m": st.floats(0, 9000),
    }),
)  # fmt: skip
def test_navigation_comes_back(t, of, values):
    assert decode(encode_navigation("aft", t, of=of, **values), EXPECTED) == Navigation(t, of, values)


@given(st.integers(0, 2**63 - 1), st.lists(st.tuples(*[st.floats(-1e6, 1e6)] * 3), min_size=3, max_size=3))
def test_positions_come_back(t, places):
    got = decode(encode_positions("aft", t, places), EXPECTED)
    assert isinstance(got, Positions)
    assert got.t_ns == t
    np.testing.assert_array_equal(got.positions_m, places)
    assert got.positions_m.dtype == np.float64
    assert not got.positions_m.flags.writeable


@given(st.integers(0, 2**63 - 1), st.text(max_size=20), st.floats(0, 86400))
def test_pulse_and_end_come_back(t, text, length_s):
    assert decode(encode_pulse("aft", t, text, length_s), EXPECTED) == Pulse(t, text, length_s)
    assert decode(encode_end("aft", text), EXPECTED) == RunEndMessage(text)


def test_recorded_bytes_of_version_1_are_read():
    """Laid down once, by hand from the msgpack specification; they stay."""
    header = bytes.fromhex(
        "8b"
        "a176" "01" "a46b696e64" "a773616d706c6573" "a56172726179" "a3616674" "a372756e" "a46e696e65"
        "a56669727374" "ce00014000" "a174" "cf18ed1d48be6d1000" "a472617465" "cb408f400000000000"
        "a57368617065" "920302" "a66c61796f7574" "a673616d706c65" "a474797065" "a26932" "a4756e6974" "a5636f756e74"
    )  # fmt: skip
    got = decode([header, bytes(range(12))], EXPECTED)
    t = 0x18ED1D48BE6D1000
    assert got == Samples("nine", 81920, t, 3, 2, "sample", "i2", "count", bytes(range(12)))


# -- reasons ---------------------------------------------------------------------------------------------------------

REFUSED = {
    "no frame": ("frames", []),
    "three frames": ("frames", [*parts(HEADER), b""]),
    "samples without data": ("frames", parts(HEADER)[:1]),
    "samples of another version without data": ("frames", parts(HEADER, v=2)[:1]),
    "end with data": ("frames", [*parts(END), b""]),
    "navigation with too much data": ("frames", [*parts(NAVIGATION), bytes(DATA_LIMIT + 1)]),
    "map too long": ("size", [bytes(HEADER_LIMIT + 1), DATA]),
    "data too long": ("size", [parts(HEADER)[0], bytes(DATA_LIMIT + 1)]),
    "data too long after nonsense": ("size", [b"\xc1", bytes(DATA_LIMIT + 1)]),
    "data too long of another version": ("size", [parts(HEADER, v=2)[0], bytes(DATA_LIMIT + 1)]),
    "empty": ("msgpack", [b""]),
    "cut": ("msgpack", [parts(HEADER)[0][:-1], DATA]),
    "trailing": ("msgpack", [parts(HEADER)[0] + b"\0", DATA]),
    "reserved byte": ("msgpack", [b"\xc1"]),
    "list": ("msgpack", [msgpack.packb([1])]),
    "text": ("msgpack", [msgpack.packb("samples")]),
    "integer key": ("msgpack", [b"\x81\x01\x01"]),
    "bytes key": ("msgpack", [msgpack.packb({b"v": 1})]),
    "list as key": ("msgpack", [b"\x81\x91\x01\x01"]),
    "not UTF-8": ("msgpack", [b"\x81\xa1\xff\x01"]),
    "surrogate": ("msgpack", [b"\x81\xa3\xed\xa0\x80\x01"]),
    "deep": ("msgpack", [b"\x81\xa1v" + b"\x91" * 5000 + b"\x01"]),
    "bomb of lists": ("msgpack", [b"\x81\xa1v" + b"\xdd\x00\x0f\xff\xff" * 900]),
    "bomb of short lists": ("msgpack", [b"\x81\xa1v" + b"\xdc\xff\xff" * 1020]),
    "bomb of maps": ("msgpack", [b"\xdf\xff\xff\xff\xff" * 1000]),
    "empty map": ("version", [b"\x80"]),
    "no v": ("version", parts(HEADER, v=GONE)),
    "v 2": ("version", parts(HEADER, v=2, kind="?")),
    "v 1.0": ("version", parts(HEADER, v=1.0)),
    "v true": ("version", parts(HEADER, v=True)),
    "v text": ("version", parts(HEADER, v="1")),
    "no kind": ("kind", parts(HEADER, kind=GONE)),
    "kind unknown": ("kind", parts(HEADER, kind="sample", array="?")),
    "kind list": ("kind", parts(HEADER, kind=["samples"])),
    "kind extension": ("kind", parts(HEADER, kind=msgpack.ExtType(5, b"samples"))),
    "no array": ("array", parts(HEADER, array=GONE)),
    "other array": ("array", parts(END, array="bow", run=1)),
    "array bytes": ("array", parts(HEADER, array=b"aft")),
    "rate": ("rate", parts(HEADER, rate=1000.5, type="?")),
    "rate 0": ("rate", parts(HEADER, rate=0)),
    "type": ("type", parts(HEADER, type="f8", unit="V", shape=[9])),
    "type big-endian": ("type", parts(HEADER, type=">i2")),
    "one channel less": ("shape", [parts(HEADER, shape=[2, 4])[0], b""]),
    "no samples": ("shape", parts(HEADER, shape=[3, 0])),
    "samples below 0": ("shape", parts(HEADER, shape=[3, -1])),
    "over a second": ("shape", parts(HEADER, shape=[3, 1001])),
    "one number": ("shape", parts(HEADER, shape=[12])),
    "three numbers": ("shape", parts(HEADER, shape=[3, 4, 1])),
    "no shape numbers": ("shape", parts(HEADER, shape=[])),
    "many shape numbers": ("shape", parts(HEADER, shape=[3] * 5000)),
    "one position less": ("shape", parts(POSITIONS, positions_m=[[0.0, 0.0, 0.0]] * 2)),
    "no position": ("shape", parts(POSITIONS, positions_m=[])),
    "16000 positions": ("shape", parts(POSITIONS, positions_m=[[0, 0, 0]] * 16000)),
    "a byte less": ("bytes", [parts(HEADER)[0], DATA[:-1]]),
    "a byte more": ("bytes", [parts(HEADER)[0], DATA + b"\0"]),
    "no bytes": ("bytes", [parts(HEADER)[0], b""]),
}


@pytest.mark.parametrize("case", REFUSED)
def test_message_is_refused_under_its_reason(case):
    expected, message = REFUSED[case]
    assert reason(message) == expected


BAD_KEYS = [
    *[(HEADER, key, GONE) for key in HEADER if key not in ("v", "kind", "array")],
    *[(HEADER, key, None) for key in HEADER if key not in ("v", "kind", "array")],
    *[(HEADER, key, value) for key in ("first", "t") for value in (-1, 1.0, True, "1", [1], 2**64 - 1)],
    (HEADER, "first", 2**53), (HEADER, "t", 2**63), (HEADER, "run", b"r"), (HEADER, "run", 1),
    (HEADER, "rate", True), (HEADER, "rate", math.nan), (HEADER, "rate", math.inf), (HEADER, "rate", "1000"),
    (HEADER, "shape", "34"), (HEADER, "shape", {"3": 4}), (HEADER, "shape", [3.0, 4]), (HEADER, "shape", [3, True]),
    (HEADER, "shape", [3, [4]]), (HEADER, "layout", "beam"), (HEADER, "layout", 1), (HEADER, "layout", ["channel"]),
    (HEADER, "type", 2), (HEADER, "type", ["i2"]), (HEADER, "type", b"i2"), (HEADER, "unit", "Pa"),
    (HEADER, "unit", "V"), (HEADER, "unit", "uPa"), (HEADER, "unit", {}),
    (NAVIGATION, "t", GONE), (NAVIGATION, "t", 1.5), (NAVIGATION, "of", "diver"), (NAVIGATION, "of", 1),
    (NAVIGATION, "latitude_deg", 90.1), (NAVIGATION, "longitude_deg", -181), (NAVIGATION, "heading_deg", -0.1),
    (NAVIGATION, "heading_deg", 361), (NAVIGATION, "heading_deg", True), (NAVIGATION, "heading_deg", "12"),
    (NAVIGATION, "heading_sigma_deg", -1), (NAVIGATION, "heading_from", 1), (NAVIGATION, "pitch_deg", 91),
    (NAVIGATION, "depth_m", math.nan), (NAVIGATION, "depth_m", math.inf), (NAVIGATION, "speed_m_s", -1),
    (NAVIGATION, "course_deg", 1000), (NAVIGATION, "sound_speed_m_s", 0), (NAVIGATION, "sound_speed_m_s", 1e9),
    (NAVIGATION, "speed_through_water_m_s", "3"), (NAVIGATION, "water_depth_m", -1), (NAVIGATION, "cable_out_m", -1),
    (POSITIONS, "t", GONE), (POSITIONS, "positions_m", GONE), (POSITIONS, "positions_m", "xyz"),
    (POSITIONS, "positions_m", [[0, 0]] * 3), (POSITIONS, "positions_m", [[0, 0, 0]] * 7 + [[0, 0, 0, 0]]),
    (POSITIONS, "positions_m", [0, 0, 0]), (POSITIONS, "positions_m", [[0, 0, None]] * 3),
    (POSITIONS, "positions_m", [[0, 0, math.nan]] * 3), (POSITIONS, "positions_m", [[0, 0, 1e300]] * 3),
    (POSITIONS, "positions_m", [[0, 0, True]] * 3),
    (PULSE, "t", GONE), (PULSE, "source", GONE), (PULSE, "source", 1), (PULSE, "length_s", GONE),
    (PULSE, "length_s", -0.1), (PULSE, "length_s", math.nan), (PULSE, "length_s", 1e300), (PULSE, "length_s", True),
    (END, "run", GONE), (END, "run", 1),
]  # fmt: skip


@pytest.mark.parametrize(("base", "key", "value"), BAD_KEYS, ids=lambda value: repr(value)[:30])
def test_bad_key_is_refused_and_named(base, key, value):
    with pytest.raises(WireError) as caught:
        decode(parts(base, **{key: value}), EXPECTED)
    assert caught.value.reason == "key"
    assert key in caught.value.detail


def test_every_reason_of_the_codec_stands_in_a_test_in_the_contract_order():
    assert REASONS == (
        "frames", "size", "msgpack", "version", "kind", "array", "key", "rate", "type", "shape", "bytes",
        "old_run", "jump", "repeat", "time", "overload",
    )  # fmt: skip
    assert {expected for expected, _ in REFUSED.values()} | {"key"} == set(REASONS[:11])


#: one fault for each reason; together with any later one, the earlier wins
FAULTS = {
    "version": {"v": 3}, "kind": {"kind": "?"}, "array": {"array": "?"}, "key": {"first": -1},
    "rate": {"rate": 7.0}, "type": {"type": "?"}, "shape": {"shape": [3, 5000]},
}  # fmt: skip


@pytest.mark.parametrize("earlier", FAULTS)
@pytest.mark.parametrize("later", FAULTS)
def test_first_reason_in_order_wins(earlier, later):
    expected = min(earlier, later, key=REASONS.index)
    assert reason(parts(HEADER, **FAULTS[earlier], **FAULTS[later] if later != earlier else {})) == expected


def test_extra_keys_and_nulls_are_ignored():
    nested = {"a": [1, {"b": [None, msgpack.ExtType(4, b"x"), msgpack.Timestamp(1, 2)]}], "list": [0] * 9000}
    assert decode(parts(HEADER, more=nested), EXPECTED) == decode(parts(HEADER), EXPECTED)
    assert decode(parts(NAVIGATION, of=None, heading_deg=None, heading_from=None), EXPECTED) == Navigation(
        T, "array", {}
    )


def test_rate_may_be_an_integer_and_a_block_a_whole_second():
    message = decode([parts(HEADER, rate=1000, shape=[3, 1000])[0], bytes(6000)], EXPECTED)
    assert message.samples == 1000


def test_buffers_of_other_shapes_are_read_as_bytes():
    header, data = parts(HEADER)
    view = memoryview(np.zeros((3, 4), "<i2"))
    assert decode([memoryview(header), view], EXPECTED).data == data
    with pytest.raises(WireError, match="bytes"):
        decode([header, memoryview(bytes(48))[::4]], EXPECTED)


def test_wire_error_crosses_processes():
    with pytest.raises(WireError) as caught:
        decode([], EXPECTED)
    copy = pickle.loads(pickle.dumps(caught.value))
    assert (copy.reason, copy.detail) == (caught.value.reason, caught.value.detail)


# -- mangled ---------------------------------------------------------------------------------------------------------

PLAIN = st.recursive(
    st.none() | st.booleans() | st.integers(-(2**63), 2**64 - 1) | st.floats() | st.text(max_size=8)
    | st.binary(max_size=8) | st.builds(msgpack.ExtType, st.integers(0, 127), st.binary(max_size=4)),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=4) | st.binary(max_size=4), inner),
    max_leaves=10,
)  # fmt: skip


def decodes_or_is_refused(message):
    refusal = WireError(REASONS[0], "")
    try:
        decode(message, EXPECTED)
    except WireError as error:
        refusal = error
    assert refusal.reason in REASONS[:11]
    assert len(refusal.detail) < 400


@settings(max_examples=300)
@given(st.sampled_from([HEADER, NAVIGATION, POSITIONS, PULSE, END]), st.data())
def test_any_value_under_any_key_is_decoded_or_refused(base, data):
    key = data.draw(st.sampled_from([*base, "heading_deg", "heading_from", "of", "more"]))
    decodes_or_is_refused(parts(base, **{key: data.draw(PLAIN)}))


@settings(max_examples=300)
@given(st.sampled_from([HEADER, NAVIGATION, POSITIONS, PULSE, END]), st.data())
def test_mangled_bytes_are_decoded_or_refused(base, data):
    header, *rest = parts(base)
    start = data.draw(st.integers(0, len(header)))
    stop = data.draw(st.integers(start, min(len(header), start + 6)))
    decodes_or_is_refused([header[:start] + data.draw(st.binary(max_size=6)) + header[stop:], *rest])


@settings(max_examples=300)
@given(st.lists(st.binary(max_size=200), max_size=4))
def test_any_bytes_are_decoded_or_refused(message):
    decodes_or_is_refused(message)


@settings(max_examples=100)
@given(st.binary(min_size=1, max_size=9), st.integers(1, 7000))
def test_repeated_bytes_are_decoded_or_refused(pattern, times):
    """Nesting and claimed lengths of every kind."""
    decodes_or_is_refused([b"\x81\xa1v" + pattern * times])


@pytest.mark.parametrize(
    "claim", [b"\xdc\x04\x00", b"\xdc\xea\x00", b"\xdc\xff\xff", b"\xdd\x00\x0f\xff\xff", b"\xdf\xff\xff\xff\xff"]
)
def test_claimed_lengths_cost_no_memory(claim):
    tracemalloc.start()
    try:
        assert reason([b"\x81\xa1v" + claim * 1000 + bytes(58_000)]) == "msgpack"
        assert tracemalloc.get_traced_memory()[1] < 16 * 2**20
    finally:
        tracemalloc.stop()


# -- misuse of the encoders ------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("call", "word"),
    [
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [1, 2]), "shape"),
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [[1]], type="i8"), "i8"),
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [[1]], layout="row"), "row"),
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [[0.5]], type="i2"), "float64"),
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [[2**15]], type="i2"), "32767"),
        (lambda: encode_samples("aft", "r", 0, 0, 1.0, [[-(2**23) - 1]], type="i3"), "8388608"),
        (lambda: encode_navigation("aft", 0, depth=3), "depth"),
        (lambda: encode_positions("aft", 0, [[1, 2]]), "shape"),
    ],
)
def test_encoder_refuses_what_cannot_be_sent(call, word):
    with pytest.raises(UsageError, match=word):
        call()
