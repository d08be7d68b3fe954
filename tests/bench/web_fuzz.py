"""Generated HTTP requests and live requests against the whole service under a live feed, for minutes on end.

`python tests/bench/web_fuzz.py [--minutes 10]`. Not part of the suite (which has a short form of each): prints what
was asked and answered, and how the serve process grew. Ends with status 1 on an answer that is not documented (of the
5xx only 503 is), on a live socket that dies without a close code, on a process that had to be started again, or on
growth of memory by more than a quarter in the last third.
"""

import argparse
import asyncio
import json
import os
import random
import subprocess
import sys
import tempfile
import threading
from collections import Counter
from pathlib import Path

import numpy as np
import websockets

sys.path.insert(0, str(Path(__file__).parents[1] / "process"))

from rig import ArrayModel, Block, Feeder, Service, block_message, encode_samples

ARRAY = ArrayModel()
BLOCK = 1000
WORDS = ["map", "detection", "track", "health", "levels", "status", "alert", "maps", "", None, 0, True, [], {}]
KEYS = ["bands", "bins", "beams", "f_min", "f_max", "rate_hz", "encoding", "pick", "other"]
VALUES = [["main"], ["low"], [], "main", 0, 1, 17, 512, -1, 1.5, 1e300, True, None, "f4", "u1", "f8", 100.0, 9e99, {}]


def feed_for_ever(feeder: Feeder, done: threading.Event) -> None:
    noise = np.random.default_rng(2).standard_normal((ARRAY.channels, BLOCK)) * 0.01
    data = encode_samples(noise, "i2", "channel")
    number = 0
    while not done.is_set():
        feeder.send(
            block_message(ARRAY, Block(number * BLOCK, BLOCK, 10**18 + number * 125_000_000, data), "a", type="i2")
        )
        number += 1
        done.wait(BLOCK / ARRAY.rate_hz)


def request(rng: random.Random) -> str | bytes:
    """A live request: good, nearly good, or nothing like one."""
    kind = rng.random()
    if kind < 0.05:
        return rng.randbytes(rng.randrange(1, 300))
    if kind < 0.1:
        return "".join(chr(rng.randrange(32, 0xD000)) for _ in range(rng.randrange(200)))
    if kind < 0.12:
        return "[" * rng.randrange(1, 70_000)
    message = {"subscribe": rng.sample(WORDS, rng.randrange(5))}
    message["map"] = {rng.choice(KEYS): rng.choice(VALUES) for _ in range(rng.randrange(4))}
    if rng.random() < 0.2:
        message["since"] = rng.choice(["begin", "", 5, "2026-01-01T00:00:00Z", "x" * 99])
    text = json.dumps(message)
    return text if rng.random() < 0.8 else text[: rng.randrange(len(text))]


async def live(url: str, seed: int, done: threading.Event, seen: Counter) -> None:
    """Connect, ask a few things, read a little, go away in one way or another; again and again."""
    rng = random.Random(seed)
    while not done.is_set():
        try:
            async with websockets.connect(url, max_size=None, open_timeout=20) as socket:
                for _ in range(rng.randrange(1, 25)):
                    await socket.send(request(rng))
                    seen["requests"] += 1
                    await read_a_little(socket, rng, seen)
                if rng.random() < 0.3:
                    socket.transport.abort()
        except websockets.ConnectionClosed as closed:
            code = closed.rcvd.code if closed.rcvd else None
            seen[f"closed {code}"] += 1
        except (websockets.InvalidStatus, OSError, TimeoutError) as error:
            seen[type(error).__name__] += 1
            await asyncio.sleep(0.2)


async def read_a_little(socket: websockets.ClientConnection, rng: random.Random, seen: Counter) -> None:
    for _ in range(rng.randrange(4)):
        try:
            message = await asyncio.wait_for(socket.recv(), 0.2)
        except TimeoutError:
            return
        seen["binary frames" if isinstance(message, bytes) else json.loads(message)["kind"]] += 1


def size(pid: int) -> tuple[float, int]:
    """Resident MB and open files of a process."""
    pages = int(Path(f"/proc/{pid}/statm").read_text().split()[1])
    return pages * os.sysconf("SC_PAGE_SIZE") / 2**20, len(os.listdir(f"/proc/{pid}/fd"))


def generated_requests(url: str, seconds: float, folder: Path) -> subprocess.CompletedProcess[str]:
    command = [
        sys.executable, "-m", "schemathesis.cli", "run", f"{url}/openapi.json", "--checks",
        "status_code_conformance,content_type_conformance,response_schema_conformance", "--continue-on-failure",
        "-H", "Content-Type: application/json", "--max-examples", "100000", "--max-time", str(int(seconds)),
        "--no-color", "--rate-limit", "60/s",
    ]  # fmt: skip
    return subprocess.run(command, cwd=folder, capture_output=True, text=True, timeout=seconds + 300, check=False)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--minutes", type=float, default=10.0)
    seconds = 60 * parser.parse_args().minutes
    done, seen, sizes = threading.Event(), Counter(), []
    bands = [ARRAY.band(), ARRAY.band(name="low", band_hz=[20.0, 500.0], beams=33)]
    with (
        tempfile.TemporaryDirectory() as folder,
        Service(ARRAY.settings(*bands, overload="drop"), Path(folder)) as service,
        service.feeder(queue=64) as feeder,
        service.listener("status") as listener,
    ):
        feed = threading.Thread(target=feed_for_ever, args=(feeder, done), daemon=True)
        feed.start()
        listener.wait_status("maps", lambda s: s["bands"]["main"]["maps"] > 5)
        entry = next(p for p in listener.of("status")[-1].header["processes"] if p["name"] == "serve")

        async def watch() -> None:
            while not done.is_set():
                sizes.append(size(entry["pid"]))
                await asyncio.sleep(5)

        async def all_live() -> None:
            url = service.http.replace("http", "ws") + "/api/v1/live"
            await asyncio.gather(watch(), *(live(url, seed, done, seen) for seed in range(8)))

        sockets = threading.Thread(target=lambda: asyncio.run(all_live()))
        sockets.start()
        result = generated_requests(service.http, seconds, Path(folder))
        done.set()
        sockets.join(60)
        feed.join(10)
        restarts = {p["name"]: p["restarts"] for p in listener.of("status")[-1].header["processes"]}
    return report(result, seen, sizes, restarts)


def report(result: subprocess.CompletedProcess[str], seen: Counter, sizes: list, restarts: dict) -> int:
    lines = result.stdout.splitlines()
    failures = next((number for number, line in enumerate(lines) if " FAILURES " in line), len(lines) - 25)
    print("\n".join(lines[max(0, failures) :]))
    print("live sockets:", dict(seen))
    print("restarts:", restarts)
    third = max(1, len(sizes) // 3)
    middle, end = np.median([mb for mb, _ in sizes[third : 2 * third]]), np.median([mb for mb, _ in sizes[-third:]])
    files = sizes[-1][1]
    print(
        f"serve: {sizes[0][0]:.0f} MB at first, {middle:.0f} MB in the middle, {end:.0f} MB at the end, {files} files"
    )
    bad = result.returncode != 0 or any(restarts.values()) or end > 1.25 * middle or seen["closed None"]
    print("bad" if bad else "good")
    return 1 if bad else 0


if __name__ == "__main__":
    sys.exit(main())
