"""Recordings: every subtype exact, seams, groups of channels, and what is said where files do not agree."""

import tracemalloc
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import soundfile
from hypothesis import given
from hypothesis import strategies as st

from soundrose.errors import StreamError, UsageError
from soundrose.feed.recording import Part, open_recording, parse_channels, read_channel_map

RATE = 1000
BITS = {"PCM_16": 16, "PCM_24": 24, "PCM_32": 32}


def integers(channels: int, samples: int, bits: int, seed: int = 1) -> np.ndarray:
    """(channels, samples) int32 over the whole range, both ends included."""
    half = 1 << (bits - 1)
    values = np.random.default_rng(seed).integers(-half, half, (channels, samples), dtype=np.int64)
    values[0, :2] = [-half, half - 1][:samples]
    return values.astype(np.int32)


def write(path: Path, values: np.ndarray, subtype: str, container: str = "WAV") -> Path:
    """Integers or floats (channels, samples) as a recording; int32 is given to the library left-justified."""
    stored = values.T
    if subtype in BITS:
        stored = np.ascontiguousarray(stored, np.int32) << (32 - BITS[subtype])
    soundfile.write(path, stored, RATE, subtype=subtype, format=container)
    return path


def read_all(recording, length=7) -> np.ndarray:
    return np.concatenate(list(recording.blocks(length)), axis=1)


@pytest.mark.parametrize(
    ("subtype", "container", "kind"),
    [
        ("PCM_16", "WAV", "i2"), ("PCM_24", "WAV", "i3"), ("PCM_32", "WAV", "i4"), ("PCM_24", "RF64", "i3"),
        ("PCM_16", "FLAC", "i2"), ("PCM_24", "FLAC", "i3"), ("PCM_32", "RF64", "i4"),
    ],
)  # fmt: skip
def test_integers_come_out_as_they_were_stored(tmp_path, subtype, container, kind):
    values = integers(3, 40, BITS[subtype])
    recording = open_recording([Part((write(tmp_path / "a", values, subtype, container),))])
    assert (recording.type, recording.channels, recording.samples, recording.rate_hz) == (kind, 3, 40, 1000.0)
    assert np.array_equal(read_all(recording), values)


def test_wav_bytes_are_those_read_without_the_library(tmp_path):
    """The samples of a 24-bit WAV are its last bytes: read without soundfile here."""
    values = integers(2, 10, 24)
    raw = write(tmp_path / "a.wav", values, "PCM_24").read_bytes()[-60:]
    stored = [int.from_bytes(raw[i : i + 3], "little", signed=True) for i in range(0, 60, 3)]
    recording = open_recording([Part((tmp_path / "a.wav",))])
    assert read_all(recording).T.ravel().tolist() == stored == values.T.ravel().tolist()


def test_floats_keep_every_bit_beyond_full_scale_and_not_finite(tmp_path):
    values = np.array([[0.1, -7.5, np.inf, np.nan], [1e-30, 3e38, -0.0, 1.0]], np.float32)
    recording = open_recording([Part((write(tmp_path / "a.wav", values, "FLOAT"),))])
    assert recording.type == "f4"
    assert read_all(recording).astype("<f4").tobytes() == values.tobytes()


def test_doubles_are_rounded_to_float(tmp_path):
    values = np.array([[0.1, 1 / 3]])
    recording = open_recording([Part((write(tmp_path / "a.wav", values, "DOUBLE"),))])
    assert np.array_equal(read_all(recording), values.astype(np.float32))


def test_files_in_a_row_join_without_losing_a_sample(tmp_path):
    values = integers(2, 50, 16)
    cuts = [0, 13, 14, 50]
    files = [write(tmp_path / f"{i}.wav", values[:, a:b], "PCM_16") for i, (a, b) in enumerate(pairwise(cuts))]
    recording = open_recording([Part(tuple(files))])
    assert recording.samples == 50
    assert np.array_equal(read_all(recording, 10), values)
    assert [b.shape[1] for b in recording.blocks(10)] == [10, 3, 1, 10, 10, 10, 6]
    swapped = open_recording([Part((files[2], files[0], files[1]))])
    assert np.array_equal(read_all(swapped), np.concatenate([values[:, 14:], values[:, :14]], axis=1))


def test_groups_side_by_side_are_put_in_the_arrays_order(tmp_path):
    values = integers(20, 30, 24)
    even, odd = list(range(0, 16, 2)), list(range(1, 16, 2))
    for name, channels in (("even", even), ("odd", odd), ("tail", [19, 18, 17, 16])):
        for part, span in ((0, slice(0, 11)), (1, slice(11, 30))):
            write(tmp_path / f"{name}-{part}.flac", values[channels][:, span], "PCM_24", "FLAC")
    (tmp_path / "groups.toml").write_text(
        '[[part]]\nfiles = ["tail-0.flac", "tail-1.flac"]\nchannels = [19, 18, 17, 16]\n'
        '[[part]]\nfiles = ["even-0.flac", "even-1.flac"]\nchannels = "0:16:2"\n'
        '[[part]]\nfiles = ["odd-0.flac", "odd-1.flac"]\nchannels = "1:16:2"\n'
    )
    recording = open_recording(read_channel_map(tmp_path / "groups.toml"))
    assert recording.channels == 20
    assert np.array_equal(read_all(recording), values)
    chosen = open_recording(read_channel_map(tmp_path / "groups.toml"), (17, 3, 0))
    assert np.array_equal(read_all(chosen), values[[17, 3, 0]])


def test_selection_chooses_and_orders(tmp_path):
    values = integers(6, 20, 16)
    part = Part((write(tmp_path / "a.wav", values, "PCM_16"),))
    assert np.array_equal(read_all(open_recording([part], parse_channels("5,0:3"))), values[[5, 0, 1, 2]])


@pytest.mark.parametrize(
    ("text", "channels"),
    [("0", (0,)), ("0,2,5:9", (0, 2, 5, 6, 7, 8)), ("0:8:2", (0, 2, 4, 6)), ("3:0:-1", (3, 2, 1))],
)
def test_channel_lists_are_half_open(text, channels):
    assert parse_channels(text) == channels


@pytest.mark.parametrize("text", ["", "a", "1,,2", "1:2:3:4", "5:5", "0:9:0", "1.5", "0:99999999999"])
def test_channel_lists_that_cannot_be_are_refused(text):
    with pytest.raises(UsageError, match="channels"):
        parse_channels(text)


@given(st.text(alphabet="0123456789:,- ", max_size=12))
def test_any_channel_list_is_read_or_refused(text):
    try:
        channels = parse_channels(text)
    except UsageError:
        return
    assert all(isinstance(channel, int) for channel in channels)


def stereo(tmp_path, name="a.wav", samples=10, subtype="PCM_16", channels=2):
    return write(tmp_path / name, integers(channels, samples, 16), subtype)


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda p: [Part(())], "no recording"),
        (lambda p: [Part((p / "none.wav",))], r"none\.wav: cannot be read"),
        (lambda p: [Part((stereo(p), stereo(p, "b.wav", subtype="PCM_24")))], r"b\.wav: subtype is PCM_24.*PCM_16"),
        (lambda p: [Part((stereo(p), stereo(p, "b.wav", channels=3)))], r"b\.wav: channels is 3.*has 2"),
        (
            lambda p: [Part((stereo(p),), (0, 1)), Part((stereo(p, "b.wav", 9),), (2, 3))],
            "samples is 9.*has 10",
        ),
        (lambda p: [Part((stereo(p),), (0, 1)), Part((stereo(p), stereo(p)), (2, 3))], "2 files.*has 1"),
        (lambda p: [Part((stereo(p),), (0, 1, 2))], "holds 2 channels; 3 are listed"),
        (lambda p: [Part((stereo(p),), (0, 1)), Part((stereo(p),), (1, 2))], "each of 0 to 3 once"),
        (lambda p: [Part((stereo(p, samples=0),))], "holds no samples"),
    ],
)
def test_files_that_do_not_agree_are_refused_before_anything_is_read(tmp_path, make, words):
    parts = make(tmp_path)
    with pytest.raises(UsageError, match=words):
        open_recording(parts)


def test_rates_that_differ_are_said(tmp_path):
    soundfile.write(tmp_path / "a.wav", np.zeros((4, 1), np.int16), 1000)
    soundfile.write(tmp_path / "b.wav", np.zeros((4, 1), np.int16), 2000)
    with pytest.raises(UsageError, match=r"b\.wav: rate_hz is 2000\.0; .*a\.wav has 1000\.0"):
        open_recording([Part((tmp_path / "a.wav", tmp_path / "b.wav"))])


def test_compressed_and_8_bit_are_refused_by_name(tmp_path):
    soundfile.write(tmp_path / "a.wav", np.zeros((4, 1)), 1000, subtype="ULAW")
    with pytest.raises(UsageError, match="ULAW; must be one of PCM_16"):
        open_recording([Part((tmp_path / "a.wav",))])


@pytest.mark.parametrize(
    ("selection", "words"), [((0, 2), r"\[2\] are not there; .* 0 to 1"), ((), "one or more"), ((1, 1), "each once")]
)
def test_selection_that_cannot_be_is_refused(tmp_path, selection, words):
    with pytest.raises(UsageError, match=words):
        open_recording([Part((stereo(tmp_path),))], selection)


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("[[part", "groups"),
        ("", "one or more"),
        ("other = 1\n[[part]]\nfiles=['a']\nchannels=[0]", "nothing else"),
        ("[[part]]\nfiles=['a']", r"part\[0\]: give files"),
        ("[[part]]\nfiles=[]\nchannels=[0]", r"part\[0\]\.files"),
        ("[[part]]\nfiles=['a']\nchannels=[true]", r"part\[0\]\.channels"),
        ("[[part]]\nfiles=['a']\nchannels='x'", "channels: got 'x'"),
    ],
)
def test_channel_map_with_a_mistake_says_where(tmp_path, text, words):
    (tmp_path / "groups.toml").write_text(text)
    with pytest.raises(UsageError, match=words):
        read_channel_map(tmp_path / "groups.toml")


def test_channel_map_that_is_not_there_is_said(tmp_path):
    with pytest.raises(UsageError, match=r"none\.toml"):
        read_channel_map(tmp_path / "none.toml")


def test_file_that_shrinks_after_its_head_was_read_is_told(tmp_path):
    path = stereo(tmp_path, samples=100)
    recording = open_recording([Part((path,))])
    path.write_bytes(path.read_bytes()[:-200])  # 50 instants of 2 x 2 bytes
    with pytest.raises(StreamError, match="ends at sample 50; its head says 100"):
        read_all(recording)
    path.unlink()
    with pytest.raises(StreamError, match="cannot be opened any more"):
        read_all(recording)


def test_broken_stream_is_told_where(tmp_path):
    path = write(tmp_path / "a.flac", integers(2, 20000, 16), "PCM_16", "FLAC")
    recording = open_recording([Part((path,))])
    raw = bytearray(path.read_bytes())
    raw[len(raw) // 2 :] = bytes(len(raw) - len(raw) // 2)
    path.write_bytes(raw)
    with pytest.raises(StreamError, match=r"a\.flac"):
        read_all(recording, 500)


def test_long_file_is_read_a_block_at_a_time(tmp_path):
    """Peak of allocations stays at a few blocks, whatever the length of the file (8 MB here)."""
    soundfile.write(tmp_path / "a.wav", np.zeros((500_000, 8), np.int16), RATE)
    recording = open_recording([Part((tmp_path / "a.wav",))])
    tracemalloc.start()
    total = sum(block.shape[1] for block in recording.blocks(1000))
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert total == 500_000
    assert peak < 200_000  # a block is 16 kB
