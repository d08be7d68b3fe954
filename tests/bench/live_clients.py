"""Tool, not a test: many live clients at one serve process; what the good ones get, and what becomes of the slow.

    python tests/bench/live_clients.py [--good 200] [--silent 20] [--trickle 20] [--seconds 30]

A synthetic publisher sends 8 maps a second of 145 x 1000. One client alone is measured first, then all of them in the
same run: ages are compared within it, as the machine may be busy with other things. Prints one JSON object.
"""

import argparse
import asyncio
import json
import multiprocessing
import os
import socket
import struct
import sys
import tempfile
import threading
import time
from pathlib import Path
from typing import Any
from urllib.parse import urlsplit

import msgpack
import numpy as np
import zmq
from websockets.asyncio.client import connect
from websockets.client import ClientProtocol
from websockets.frames import Frame, Opcode
from websockets.uri import parse_uri

from soundrose.child import Orders
from soundrose.children import Child
from soundrose.settings import parse_settings

BEAMS, BINS, MAPS_HZ = 145, 1000, 8
REQUEST = {"subscribe": ["map"], "map": {"bins": 256, "beams": 145, "rate_hz": 5, "encoding": "u1"}}
LIMITS = {"channels_used": 48, "channels": 48, "gap": False, "clipped": 0.0, "alias_hz": 2000.0, "masked": 0.0}
SETTINGS = {
    "array": {"id": "aft", "hydrophones": 48, "spacing_m": 0.375},
    "calibration": {"sensitivity_db": -180.0, "gain_db": 20.0, "full_scale_v": 2.5},
    "bands": [{"name": "main", "band_hz": [50.0, 4000.0], "frame": 4096, "beams": BEAMS}],
}


def publish(socket_: Any, ending: threading.Event) -> None:
    """Maps whose `t_end` is the host's time of sending, and a status each second, until told to end."""
    noise = np.random.default_rng(1).gamma(8, 1 / 8, (16, BEAMS, BINS))
    maps = [np.ascontiguousarray(60 + 10 * np.log10(values), "<f4") for values in noise]
    cone = [float(v) for v in np.degrees(np.arccos(np.linspace(1, -1, BEAMS)))]
    head = {"v": 1, "kind": "map", "array": "aft", "start": "00000000000000aa", "band": "main", "run": "bench",
            "shape": [BEAMS, BINS], "cone_deg": cone, "f0_hz": 50.78125, "df_hz": 3.90625,
            "quantity": "spectral density level", "unit": "dB re 1 \u00b5Pa\u00b2/Hz", "limits": LIMITS,
            "span_s": 2.0, "averages": 9.5}  # fmt: skip
    status = {
        "v": 1,
        "kind": "status",
        "array": "aft",
        "start": "00000000000000bb",
        "processes": [],
        "state": "running",
    }
    began, seq = time.monotonic(), 0
    while not ending.is_set():
        if seq % MAPS_HZ == 0:
            socket_.send_multipart([b"status", msgpack.packb({**status, "seq": seq // MAPS_HZ})])
        now = time.time_ns()
        header = msgpack.packb({**head, "seq": seq, "t": now, "t_end": now, "latency_ms": 0.0})
        socket_.send_multipart([b"map/main", header, maps[seq % 16]])
        seq += 1
        ending.wait(max(0.0, began + seq / MAPS_HZ - time.monotonic()))


def good_clients(address: str, count: int, seconds: float, out: Any) -> None:
    """In a process of its own: ages (ms) and rates of stock clients that read all they get."""
    out.put(asyncio.run(_good_clients(address, count, seconds)))


async def _good_clients(address: str, count: int, seconds: float) -> dict[str, Any]:
    ages: list[float] = []
    received, skipped, spans = [0] * count, [0] * count, [0.0] * count

    async def one(number: int) -> None:
        async with connect(address, max_size=None, compression=None) as connection:
            await connection.send(json.dumps(REQUEST))
            await connection.recv()
            until, first, last = time.monotonic() + seconds, 0.0, 0.0
            while time.monotonic() < until:
                frame = await connection.recv()
                now = time.time_ns()
                header = msgpack.unpackb(frame[4 : 4 + struct.unpack_from("<I", frame)[0]])
                last = header["t_end"] / 1e9
                if not first:  # the newest map at once: of any age
                    first = last
                    continue
                ages.append((now - header["t_end"]) / 1e6)
                received[number] += 1
                skipped[number] += header["skipped"]
            spans[number] = last - first

    await asyncio.gather(*(one(number) for number in range(count)))
    rates = [n / span for n, span in zip(received, spans, strict=True)]
    p50, p99 = np.percentile(ages, [50, 99])
    return {
        "clients": count, "maps": sum(received), "rate_hz": [round(min(rates), 3), round(max(rates), 3)],
        "skipped_share": round(sum(skipped) / (sum(skipped) + sum(received)), 4),
        "age_ms": {"p50": round(p50, 1), "p99": round(p99, 1), "max": round(max(ages), 1)},
        "cpu_s": round(time.process_time(), 2),
    }  # fmt: skip


class RawClient:
    """A client that reads its socket by hand, or not at all. bytes_s : what it reads a second while it lives."""

    def __init__(self, address: str, bytes_s: int) -> None:
        self._bytes_s = bytes_s
        parts = urlsplit(address)
        self._socket = socket.create_connection((parts.hostname, parts.port))
        self._protocol = ClientProtocol(parse_uri(address))
        self._protocol.send_request(self._protocol.connect())
        self._flush()
        while self._protocol.state.name == "CONNECTING":
            self._protocol.receive_data(self._socket.recv(4096))
        self._protocol.send_text(json.dumps(REQUEST).encode())
        self._flush()

    def trickle(self, ending: threading.Event) -> None:
        while not ending.wait(1.0):
            if self._bytes_s:
                self._protocol.receive_data(self._socket.recv(self._bytes_s))

    def close_code(self) -> int:
        """Read what is left, as a client that wakes up does."""
        self._socket.settimeout(10)
        try:
            while data := self._socket.recv(1 << 16):
                self._protocol.receive_data(data)
                self._flush()  # the answer to a close frame
        except OSError:
            pass
        maps = [e for e in self._protocol.events_received() if isinstance(e, Frame) and e.opcode is Opcode.BINARY]
        self.maps = len(maps)
        self._socket.close()
        received = self._protocol.close_rcvd
        return 1006 if received is None else received.code

    def _flush(self) -> None:
        for data in self._protocol.data_to_send():
            self._socket.sendall(data)


def memory_mb(pid: int) -> dict[str, float]:
    lines = dict(line.split(":", 1) for line in Path(f"/proc/{pid}/status").read_text().splitlines() if ":" in line)
    return {key: round(int(lines[key].split()[0]) / 1024, 1) for key in ("VmRSS", "VmHWM")}


def cpu_s(pid: int) -> float:
    fields = Path(f"/proc/{pid}/stat").read_text().rsplit(")", 1)[1].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def measured(address: str, count: int, seconds: float) -> dict[str, Any]:
    context = multiprocessing.get_context("spawn")
    out = context.Queue()
    process = context.Process(target=good_clients, args=(address, count, seconds, out))
    process.start()
    result: dict[str, Any] = out.get()
    process.join()
    return result


def start_serve(context: "zmq.Context[Any]", folder: str) -> tuple[Child, Any, Any]:
    """(child, publisher, control) of a real serve process on its way up."""
    publisher, control = context.socket(zmq.PUB), context.socket(zmq.PULL)
    publish_port = publisher.bind_to_random_port("tcp://127.0.0.1")
    control_port = control.bind_to_random_port("tcp://127.0.0.1")
    endpoints = {
        "publish": f"tcp://127.0.0.1:{publish_port}", "control": f"tcp://127.0.0.1:{control_port}",
        "http": "http://127.0.0.1:0", "commands": f"ipc://@bench-{os.getpid()}-commands",
    }  # fmt: skip
    settings = parse_settings({**SETTINGS, "store": {"path": folder}})
    child = Child("serve")
    child.start(Orders("serve", settings, endpoints, parent=os.getpid()))
    return child, publisher, control


def run(arguments: argparse.Namespace) -> dict[str, Any]:
    context, ending = zmq.Context(), threading.Event()
    with tempfile.TemporaryDirectory() as folder:
        child, publisher, control = start_serve(context, folder)
        sender = threading.Thread(target=publish, args=(publisher, ending))
        drain = threading.Thread(target=_drain, args=(control, ending))
        sender.start()
        try:
            beat: dict[str, Any] = {"ready": False}
            while not beat["ready"]:
                if not control.poll(30_000) or child.exit_code is not None:
                    raise SystemExit("serve did not come up")
                beat = msgpack.unpackb(control.recv())
            drain.start()
            return _measure(arguments, beat["facts"]["http"].replace("http", "ws") + "/api/v1/live", child.pid or 0)
        finally:
            ending.set()
            sender.join()
            if drain.is_alive():
                drain.join()
            child.let_go()
            child.kill()
            publisher.close(0)
            control.close(0)
            context.term()


def _drain(control: Any, ending: threading.Event) -> None:
    while not ending.is_set():
        if control.poll(200):
            control.recv()


def _measure(arguments: argparse.Namespace, address: str, pid: int) -> dict[str, Any]:
    alone = measured(address, 1, min(arguments.seconds, 15))
    before, ending = memory_mb(pid), threading.Event()
    slow = [RawClient(address, 0) for _ in range(arguments.silent)]
    trickling = [RawClient(address, 1000) for _ in range(arguments.trickle)]
    threads = [threading.Thread(target=client.trickle, args=(ending,)) for client in trickling]
    for thread in threads:
        thread.start()
    began, used = time.monotonic(), cpu_s(pid)
    loaded = measured(address, arguments.good, arguments.seconds)
    share = (cpu_s(pid) - used) / (time.monotonic() - began)
    after = memory_mb(pid)
    ending.set()
    for thread in threads:
        thread.join()
    codes = {"silent": _count(slow), "trickle": _count(trickling)}
    over = loaded["age_ms"]["p99"] - alone["age_ms"]["p99"]
    return {
        "alone": alone, "loaded": loaded, "p99_over_alone_ms": round(over, 1),
        "serve_cores": round(share, 3), "memory_before_mb": before, "memory_after_mb": after, "close_codes": codes,
        "maps_to_silent": sum(c.maps for c in slow) / max(len(slow), 1), "cores": os.cpu_count(),
        "load": os.getloadavg()[0],
    }  # fmt: skip


def _count(clients: list[RawClient]) -> dict[str, int]:
    codes = [str(client.close_code()) for client in clients]
    return {code: codes.count(code) for code in sorted(set(codes))}


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--good", type=int, default=200)
    parser.add_argument("--silent", type=int, default=20)
    parser.add_argument("--trickle", type=int, default=20)
    parser.add_argument("--seconds", type=float, default=30.0)
    print(json.dumps(run(parser.parse_args()), indent=1))
    return 0


if __name__ == "__main__":
    sys.exit(main())
