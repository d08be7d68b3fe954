"""`soundrose feed file` through a real PULL socket, read back with stock msgpack."""

import io
import threading

import msgpack
import numpy as np
import pytest
import soundfile
import zmq
from rich.console import Console
from typer.testing import CliRunner

from soundrose.errors import UsageError
from soundrose.feed.command import FileOptions, feed_app, feed_file, parse_start, target_of

RATE = 8000
DECODED = {"i2": "<i2", "i4": "<i4", "f4": "<f4"}


class Feed:
    """A PULL socket whose messages are taken by a thread until an `end`."""

    def __init__(self, context):
        self.socket = context.socket(zmq.PULL)
        self.socket.setsockopt(zmq.RCVTIMEO, 20_000)
        self.socket.bind("tcp://127.0.0.1:*")
        self.address = self.socket.getsockopt_string(zmq.LAST_ENDPOINT)
        self.messages = []
        self._thread = threading.Thread(target=self._take)

    def _take(self):
        while not self.messages or self.messages[-1][0]["kind"] != "end":
            header, *data = self.socket.recv_multipart()
            self.messages.append((msgpack.unpackb(header), *data))

    def play(self, *files, **options):
        self._thread.start()
        console = Console(file=io.StringIO(), width=200)
        status = feed_file(
            files, FileOptions(**({"to": self.address, "array": "aft", "speed": "max"} | options)), console
        )
        self._thread.join(20)
        return status, console.file.getvalue()

    def samples(self):
        """(channels, samples) of all blocks, as Python integers or float32."""
        return np.concatenate([decoded(*message) for message in self.messages[:-1]], axis=1)


def decoded(header, data):
    channels, length = header["shape"]
    if header["type"] == "i3":
        flat = np.array([int.from_bytes(data[i : i + 3], "little", signed=True) for i in range(0, len(data), 3)])
    else:
        flat = np.frombuffer(data, DECODED[header["type"]])
    return flat.reshape(channels, length) if header["layout"] == "channel" else flat.reshape(length, channels).T


@pytest.fixture
def feed():
    with zmq.Context() as context:
        feed = Feed(context)
        yield feed
        feed.socket.close(0)


def noise(channels, samples, bits=None, seed=3):
    rng = np.random.default_rng(seed)
    if bits is None:
        return rng.standard_normal((channels, samples)).astype(np.float32)
    return rng.integers(-(1 << (bits - 1)), 1 << (bits - 1), (channels, samples)).astype(np.int32)


def write(path, values, subtype):
    bits = {"PCM_16": 16, "PCM_24": 24, "PCM_32": 32}.get(subtype)
    soundfile.write(path, values.T if bits is None else values.T << (32 - bits), RATE, subtype=subtype)
    return path


@pytest.mark.parametrize(
    ("subtype", "bits", "kind"),
    [("PCM_16", 16, "i2"), ("PCM_24", 24, "i3"), ("PCM_32", 32, "i4"), ("FLOAT", None, "f4")],
)
def test_every_subtype_reaches_the_feed_bit_for_bit(feed, tmp_path, subtype, bits, kind):
    values = noise(5, 1234, bits)
    status, text = feed.play(
        write(tmp_path / "a.wav", values, subtype), run="r", start="2026-05-04T03:00:00Z", block=100
    )
    assert (status, "sent 1234 samples" in text) == (0, True)
    assert np.array_equal(feed.samples(), values)
    header = feed.messages[1][0]
    assert header | {"shape": None, "layout": None} == {
        "v": 1, "kind": "samples", "array": "aft", "run": "r", "first": 100, "t": 1_777_863_600_012_500_000,
        "rate": 8000.0, "shape": None, "layout": None, "type": kind, "unit": "count",
    }  # fmt: skip
    assert feed.messages[-1][0] == {"v": 1, "kind": "end", "array": "aft", "run": "r"}


def test_several_files_are_one_run_without_a_seam(feed, tmp_path):
    values = noise(3, 1000, 16)
    files = [
        write(tmp_path / f"{i}.wav", part, "PCM_16") for i, part in enumerate(np.split(values, [333, 700], axis=1))
    ]
    assert feed.play(*files, block=128)[0] == 0
    headers = [header for header, _ in feed.messages[:-1]]
    expected = 0
    for header in headers:
        assert header["first"] == expected
        assert header["t"] - headers[0]["t"] == round(expected * 1e9 / RATE)
        expected += header["shape"][1]
    assert expected == 1000
    assert np.array_equal(feed.samples(), values)
    assert len({header["run"] for header in headers}) == 1


def test_flac_groups_reach_the_feed_in_the_arrays_order(feed, tmp_path):
    values = noise(12, 500, 24)
    write(tmp_path / "a.flac", values[8:], "PCM_24")
    write(tmp_path / "b.flac", values[:8], "PCM_24")
    (tmp_path / "map.toml").write_text(
        '[[part]]\nfiles = ["a.flac"]\nchannels = "8:12"\n[[part]]\nfiles = ["b.flac"]\nchannels = "0:8"\n'
    )
    assert feed.play(channel_map=tmp_path / "map.toml", channels="11,0:3")[0] == 0
    assert np.array_equal(feed.samples(), values[[11, 0, 1, 2]])


def test_repeat_goes_on_in_the_same_run(feed, tmp_path):
    values = noise(2, 300, 16)
    assert feed.play(write(tmp_path / "a.wav", values, "PCM_16"), repeat=3, block=200)[0] == 0
    assert np.array_equal(feed.samples(), np.tile(values, 3))
    assert [header["first"] for header, _ in feed.messages[:-1]] == [0, 200, 300, 500, 600, 800]


def test_floats_carry_the_unit_asked_for(feed, tmp_path):
    assert feed.play(write(tmp_path / "a.wav", noise(2, 50), "FLOAT"), unit="uPa")[0] == 0
    assert feed.messages[0][0]["unit"] == "uPa"


def test_real_time_takes_as_long_as_the_recording(feed, tmp_path):
    """Only the lower bound is a promise: no block goes out before its last sample could have been taken."""
    status, text = feed.play(write(tmp_path / "a.wav", noise(1, 2400, 16), "PCM_16"), speed="2")
    elapsed = float(text.rsplit(" in ", 1)[1].split()[0])
    assert status == 0
    assert elapsed >= 0.1  # 0.3 s at twice real time, printed to 0.1


def run(*files, **options):
    console = Console(file=io.StringIO(), width=300)
    return feed_file(files, FileOptions(**options), console), console.file.getvalue()


def test_nobody_takes_samples_ends_with_status_1_and_says_where(tmp_path):
    with zmq.Context() as context:
        probe = context.socket(zmq.PULL)
        probe.bind("tcp://127.0.0.1:*")
        nobody = probe.getsockopt_string(zmq.LAST_ENDPOINT)
        probe.close(0)
    path = write(tmp_path / "a.wav", noise(1, 10, 16), "PCM_16")
    status, text = run(path, to=nobody, array="aft", speed="max", timeout_s=0.05)
    assert status == 1
    assert f"nothing took samples at {nobody} for 0.05 s" in text
    assert "sent 0 samples" in text


SETTINGS = """
[array]
id = "bow"
hydrophones = 2
spacing_m = 1.0
[feed]
rate_hz = {rate}
bind = "{bind}"
[[bands]]
name = "main"
band_hz = [100.0, 1000.0]
frame = 1024
beams = 9
shading = "uniform"
"""


def test_settings_give_array_and_address(feed, tmp_path):
    config = tmp_path / "bow.toml"
    config.write_text(SETTINGS.format(rate=8000.0, bind=feed.address))
    path = write(tmp_path / "a.wav", noise(2, 100, 16), "PCM_16")
    assert feed.play(path, config=config, to=None, array=None)[0] == 0
    assert feed.messages[0][0]["array"] == "bow"


@pytest.mark.parametrize(
    ("overload", "speed", "told"), [("drop", "max", True), ("drop", "1", False), ("hold", "max", False)]
)
def test_faster_than_real_time_into_drop_is_warned_of(feed, tmp_path, overload, speed, told):
    """A recording played faster than a live array into a service that leaves hops out loses them in silence else."""
    config = tmp_path / "bow.toml"
    config.write_text(
        SETTINGS.format(rate=8000.0, bind=feed.address).replace("[[bands]]", f'overload = "{overload}"\n[[bands]]')
    )
    path = write(tmp_path / "a.wav", noise(2, 100, 16), "PCM_16")
    status, text = feed.play(path, config=config, to=None, array=None, speed=speed)
    assert (status, "dropped_hops" in text) == (0, told)


@pytest.mark.parametrize(
    ("rate", "channels", "words"),
    [(16000.0, 2, "feed.rate_hz = 16000"), (8000.0, 3, "3 channels would be sent, the settings list 2")],
)
def test_recording_that_the_settings_do_not_expect_is_refused(tmp_path, rate, channels, words):
    config = tmp_path / "bow.toml"
    config.write_text(SETTINGS.format(rate=rate, bind="tcp://127.0.0.1:5510"))
    status, text = run(write(tmp_path / "a.wav", noise(channels, 10, 16), "PCM_16"), config=config)
    assert (status, words in text) == (2, True)


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"array": None}, "--array ID"),
        ({"speed": "0"}, "speed"),
        ({"start": "yesterday"}, "start"),
        ({"start": "2026-05-04T03:00:00"}, "with its zone"),
        ({"block": 8001}, "1 sample to 1 s (8000 samples)"),
        ({"block": 0}, "block: got 0"),
        ({"unit": "dB"}, "count, V, uPa"),
        ({"unit": "V"}, "PCM_16; V and uPa go with floats"),
        ({"repeat": -1}, "repeat"),
        ({"channels": "2"}, "0 to 1"),
        ({"to": "nowhere"}, "endpoint"),
        ({"channel_map": "x.toml"}, "one of the two"),
    ],
)
def test_mistakes_end_with_status_2_before_anything_is_sent(tmp_path, options, words):
    path = write(tmp_path / "a.wav", noise(2, 10, 16), "PCM_16")
    status, text = run(path, **({"array": "aft", "to": "tcp://127.0.0.1:9"} | options))
    assert (status, words in text) == (2, True), text


def test_any_port_in_the_settings_needs_an_address():
    from soundrose.settings import parse_settings

    raw = {
        "array": {"id": "a", "hydrophones": 2, "spacing_m": 1.0},
        "feed": {"bind": "tcp://127.0.0.1:*", "rate_hz": 8000.0},
        "bands": [{"name": "main", "band_hz": [100.0, 1000.0], "frame": 1024, "beams": 9, "shading": "uniform"}],
    }
    with pytest.raises(UsageError, match="--to"):
        target_of(None, None, parse_settings(raw))
    raw["feed"]["bind"] = "tcp://*:77"
    assert target_of(None, None, parse_settings(raw)).address == "tcp://127.0.0.1:77"
    assert target_of("tcp://10.0.0.1:5", "b", parse_settings(raw)).array == "b"


def test_start_is_exact_to_the_microsecond():
    assert parse_start("1970-01-01T01:00:00.000001+01:00") == 1000


def test_command_line_passes_every_option(feed, tmp_path):
    path = write(tmp_path / "a.wav", noise(2, 40, 16), "PCM_16")
    feed._thread.start()
    arguments = [
        "file", str(path), "--to", feed.address, "--array", "aft", "--run", "q", "--speed", "max", "--block", "16",
        "--channels", "1", "--start", "1970-01-01T00:00:01Z", "--timeout", "20",
    ]  # fmt: skip
    result = CliRunner().invoke(feed_app, arguments)
    feed._thread.join(20)
    assert result.exit_code == 0, result.output
    header = feed.messages[0][0]
    assert (header["run"], header["shape"], header["t"]) == ("q", [1, 16], 1_000_000_000)


def test_help_shows_examples():
    result = CliRunner().invoke(feed_app, ["file", "--help"])
    assert "--channel-map groups.toml" in result.output
