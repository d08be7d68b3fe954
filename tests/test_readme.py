"""The README's Python runs as printed, but for the ports, against sockets of our own; its links lead somewhere."""

import os
import re
import signal
import subprocess
import sys
from pathlib import Path

import msgpack
import numpy as np
import pytest
import zmq

ROOT = Path(__file__).parent.parent
README = (ROOT / "README.md").read_text("utf-8")
SNIPPETS = re.findall(r"```python\n(.*?)```", README, re.DOTALL)
LIMIT_MS = 20_000


def snippet(word: str) -> str:
    """The one snippet with `word` in it."""
    (found,) = [text for text in SNIPPETS if word in text]
    return found


@pytest.fixture
def context():
    with zmq.Context() as context:
        yield context
        context.destroy(linger=0)


@pytest.fixture
def bound(context):
    """Makes a bound socket and says where; all are closed at the end."""
    sockets = []

    def make(kind):
        sockets.append(context.socket(kind))
        sockets[-1].setsockopt(zmq.RCVTIMEO, LIMIT_MS)
        sockets[-1].bind("tcp://127.0.0.1:*")
        return sockets[-1], sockets[-1].getsockopt_string(zmq.LAST_ENDPOINT)

    yield make
    for socket in sockets:
        socket.close(0)


def blocks():
    """Three blocks of int16 (48, n), then None: what the README calls `next_block`."""
    rng = np.random.default_rng(1)
    made = [rng.integers(-500, 500, (48, n)).astype(np.int16) for n in (1600, 800, 1600)]
    left = iter([*made, None])
    return made, lambda: next(left)


@pytest.mark.parametrize("word", ["msgpack", "Source"])
def test_own_array_sends_every_sample_to_the_feed(bound, word):
    pull, address = bound(zmq.PULL)
    made, next_block = blocks()
    code = snippet(word)
    assert "tcp://127.0.0.1:5510" in code
    exec(compile(code.replace("tcp://127.0.0.1:5510", address), "README.md", "exec"), {"next_block": next_block})
    first = 0
    for samples in made:
        header, data = pull.recv_multipart()
        header = msgpack.unpackb(header)
        assert (header["kind"], header["array"], header["first"]) == ("samples", "aft", first)
        assert (header["rate"], header["shape"], header["type"]) == (16000.0, list(samples.shape), "i2")
        assert data == samples.tobytes()
        first += samples.shape[1]


def test_the_feeds_own_reader_takes_what_the_plain_snippet_sends(bound):
    """The service's decoder accepts it: the README and the contract say the same."""
    from soundrose.feed.messages import Expected, Samples, decode

    pull, address = bound(zmq.PULL)
    _, next_block = blocks()
    exec(snippet("msgpack").replace("tcp://127.0.0.1:5510", address), {"next_block": next_block})
    for _ in range(3):
        assert isinstance(decode(pull.recv_multipart(), Expected("aft", 48, 16000.0)), Samples)


def published_map(seq: int) -> list[bytes]:
    levels = np.full((3, 4), 40.0, "<f4")
    levels[2] = 90.0
    header = {
        "v": 1, "kind": "map", "array": "aft", "band": "main", "seq": seq, "start": "00000000000000aa",
        "t": 1_796_133_600_000_000_000, "t_end": 1_796_133_600_256_000_000, "shape": [3, 4],
        "cone_deg": [0.0, 90.0, 180.0], "f0_hz": 500.0, "df_hz": 250.0,
    }  # fmt: skip
    return [b"map/main", msgpack.packb(header), levels.tobytes()]


def test_subscriber_prints_loudest_bearings_and_holes(bound):
    publisher, address = bound(zmq.XPUB)
    code = snippet("Subscriber").replace("tcp://127.0.0.1:5511", address)
    process = subprocess.Popen(
        [sys.executable, "-c", code], stdout=subprocess.PIPE, encoding="utf-8", env=os.environ | {"PYTHONUTF8": "1"}
    )
    try:
        assert publisher.recv() == b"\x01map/main"
        publisher.send_multipart(published_map(0))
        assert process.stdout.readline().startswith("2026-12-01T14:00:00.000000Z  180.0 deg  120.0 dB")
        publisher.send_multipart(published_map(4))
        assert process.stdout.readline() == "maps missed: 3\n"
    finally:
        process.send_signal(signal.SIGKILL)
        process.communicate()


def test_snippets_are_as_short_as_promised():
    """Own array and subscribing in ten lines each, imports and comments aside."""
    for text in SNIPPETS:
        lines = [
            line for line in text.splitlines() if line.strip() and not line.lstrip().startswith(("#", "import", "from"))
        ]
        assert len(lines) <= 10, text


def test_job_is_one_paragraph_at_the_top():
    title, paragraph, heading = README.split("\n\n")[:3]
    assert title == "# soundrose"
    assert paragraph.startswith("soundrose is")
    assert heading.startswith("## ")


@pytest.mark.parametrize(
    "page", ["README.md", "DEVELOPERS.md", *(f"docs/{p.name}" for p in (ROOT / "docs").glob("*.md"))]
)
def test_links_lead_to_files_that_are_there(page):
    text = (ROOT / page).read_text("utf-8")
    for link in re.findall(r"\]\(([^)#:\s]+)(?:#[^)]*)?\)", text):
        assert (ROOT / page).parent.joinpath(link).exists(), link


def test_every_caution_stands_in_the_readme():
    for words in (
        "Not a navigation or collision-avoidance aid", "Absence of detection is not absence of an animal or a vessel",
        "not heard at all", "qualified observers under the permit and local rules in force",
        "Levels are as good as the calibration entered", "cannot tell port from starboard",
    ):  # fmt: skip
        assert words in " ".join(README.split())
