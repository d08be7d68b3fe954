"""The same feed to the live service in `hold` and to a Pipeline in this process, compared bit for bit.

As a program: `python tests/pipeline/live_and_embedded.py --seconds 600` (the long form; the suite runs a short one).
"""

import argparse
import json
import signal
import subprocess
import sys
import tempfile
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import msgpack
import numpy as np
import zmq

from soundrose import Pipeline, load_settings
from soundrose.feed.messages import encode_end, encode_navigation, encode_positions, encode_samples

RATE = 8000
CHANNELS = 24
VARYING = ("seq", "start", "latency_ms")
SETTINGS = """
[array]
id = "aft"
hydrophones = 24
spacing_m = 0.75
[feed]
bind = "tcp://127.0.0.1:*"
rate_hz = 8000.0
overload = "hold"
[calibration]
sensitivity_db = -180.0
gain_db = 20.0
full_scale_v = 2.5
[water]
sound_speed_m_s = 1500.0
[[bands]]
name = "low"
band_hz = [20.0, 900.0]
frame = 4096
beams = 61
average_s = 2.0
[[bands]]
name = "high"
band_hz = [500.0, 3500.0]
frame = 1024
beams = 91
average_s = 0.5
channels = "6:18"
[publish]
bind = "tcp://127.0.0.1:*"
[serve]
port = 0
[store]
path = "{store}"
"""


def messages(seconds: float, block: int, seed: int = 3) -> Iterator[list[bytes]]:
    """A feed with a tone, noise, a dead hydrophone, a gap, a new sound speed and new positions."""
    total = int(seconds * RATE)
    gap_at, gap, t0 = total // 3, 1234, 1_796_133_600_000_000_000

    def t_ns(index: int) -> int:
        return t0 + round(index * 1e9 / RATE)

    x_m = (np.arange(CHANNELS)[::-1] - (CHANNELS - 1) / 2) * 0.75
    bent = np.stack([x_m * 0.97, 0.1 * np.arange(CHANNELS), np.zeros(CHANNELS)], axis=1)
    notes = {
        total // 2: encode_navigation("aft", t_ns(total // 2), sound_speed_m_s=1478.5),
        2 * total // 3: encode_positions("aft", t_ns(2 * total // 3 + 700), bent),
    }
    first = 0
    while first < total:
        if first >= gap_at > first - block:
            first += gap
        for at in sorted(notes):
            if at <= first:
                yield list(notes.pop(at))
        length = min(block, total - first)
        index = first + np.arange(length)
        chunk = np.random.default_rng([seed, first]).standard_normal((CHANNELS, length)) * 300
        chunk += 900 * np.sin(2 * np.pi * 440 * (index / RATE + x_m[:, None] * 0.4 / 1500))
        chunk[5] = 0
        values = np.rint(chunk).astype("<i2")
        yield list(encode_samples("aft", "night", first, t_ns(first), float(RATE), values, type="i2"))
        first += length
    yield list(encode_end("aft", "night"))


def embedded(config: Path, feed: list[list[bytes]]) -> dict[str, list[tuple[dict, bytes]]]:
    """Products of a Pipeline by topic, as (header, bytes)."""
    found: dict[str, list[tuple[dict, bytes]]] = {}
    for product in Pipeline(load_settings(config)).run(feed):
        data = product.level_db.tobytes() if hasattr(product, "level_db") else b""
        found.setdefault(product.topic, []).append((dict(product.header), data))
    return found


def live(config: Path, feed: list[list[bytes]], expected: dict[str, int], pause_s: float = 0.0):
    """Products of the running service by topic, until as many have come as expected."""
    service = subprocess.Popen(
        [sys.executable, "-m", "soundrose", "run", "--config", str(config)], stdout=subprocess.PIPE
    )
    context = zmq.Context()
    found: dict[str, list[tuple[dict, bytes]]] = {}
    try:
        ready = json.loads(service.stdout.readline())
        subscriber = context.socket(zmq.SUB)
        subscriber.setsockopt(zmq.RCVHWM, 0)
        subscriber.setsockopt(zmq.LINGER, 0)
        subscriber.connect(ready["publish"])
        subscriber.subscribe("")
        sender = threading.Thread(target=_send, args=(context, ready["feed"], feed, pause_s))
        deadline = time.monotonic() + 120 + len(feed) * (pause_s + 0.05)
        while any(len(found.get(topic, ())) < count for topic, count in expected.items()):
            assert time.monotonic() < deadline, {topic: len(items) for topic, items in found.items()}
            if not subscriber.poll(1000):
                continue
            topic, header, *data = subscriber.recv_multipart()
            found.setdefault(topic.decode(), []).append((msgpack.unpackb(header), data[0] if data else b""))
            if topic == b"status" and not sender.ident:
                sender.start()  # the subscription has arrived
        sender.join()
        subscriber.close()
    finally:
        service.send_signal(signal.SIGTERM)
        service.wait(20)
        service.stdout.close()
        context.destroy(linger=0)
    return found


def _send(context: zmq.Context, address: str, feed: list[list[bytes]], pause_s: float) -> None:
    with context.socket(zmq.PUSH) as push:
        push.setsockopt(zmq.SNDHWM, 20)
        push.setsockopt(zmq.LINGER, 60_000)
        push.connect(address)
        for parts in feed:
            push.send_multipart(parts)
            time.sleep(pause_s)


def compare(left: dict, right: dict, topics: list[str]) -> int:
    """Every product of these topics is the same to the bit; returns how many."""
    count = 0
    for topic in topics:
        assert len(left[topic]) == len(right[topic]), topic
        for (a_header, a_data), (b_header, b_data) in zip(left[topic], right[topic], strict=True):
            for key, value in a_header.items():
                assert b_header[key] == value, (topic, key, value, b_header[key])
            assert set(b_header) - set(a_header) == {"v", "kind", "array", "seq", "start"} | (
                {"latency_ms"} if topic.startswith("map/") else set()
            )
            assert a_data == b_data, (topic, b_header["seq"])
            count += 1
    return count


def check(seconds: float, block: int, pause_s: float = 0.0) -> str:
    """Run both and compare; a line that says what was compared."""
    with tempfile.TemporaryDirectory() as folder:
        config = Path(folder) / "aft.toml"
        config.write_text(SETTINGS.format(store=Path(folder) / "store"))
        feed = list(messages(seconds, block))
        inside = embedded(config, feed)
        begun = time.monotonic()
        outside = live(config, feed, {topic: len(items) for topic, items in inside.items()}, pause_s)
        wall = time.monotonic() - begun
        count = compare(inside, outside, sorted(inside))
    return f"{seconds:g} s of feed, blocks of {block}, {wall:.1f} s: {count} products the same to the bit"


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seconds", type=float, default=600.0)
    arguments = parser.parse_args()
    print(check(arguments.seconds, 1000))
    print(check(arguments.seconds, 777, pause_s=0.002))
