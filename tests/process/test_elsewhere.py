"""A band that is worked by a process started by hand, as on another host: joined over TCP, counted like the rest."""

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest
from rig import (
    ArrayModel,
    Block,
    Feeder,
    Listener,
    Service,
    block_message,
    encode_samples,
    free_ports,
    sensor_noise,
    wait_until,
)  # fmt: skip

ARRAY = ArrayModel()
NOISE = encode_samples(sensor_noise(32, 1000, 8000.0, 90.0) / ARRAY.full_scale_upa, "i2", "channel")


@pytest.fixture
def service(tmp_path: Path) -> Iterator[Service]:
    bands = [ARRAY.band(), ARRAY.band(name="far", frame=4096, beams=61, place="elsewhere")]
    settings = ARRAY.settings(*bands, overload="hold")
    ports = free_ports(3)
    settings["stream"] = {
        key: f"tcp://127.0.0.1:{port}" for key, port in zip(("bind", "collect", "control"), ports, strict=True)
    }
    with Service(settings, tmp_path) as service:
        yield service


def start_band(service: Service) -> subprocess.Popen[bytes]:
    return subprocess.Popen(
        [sys.executable, "-m", "soundrose", "band", "--config", str(service.config), "--name", "far"],
        env=service.environment, cwd=service.folder, stdin=subprocess.DEVNULL,
    )  # fmt: skip


def send(feeder: Feeder, first_block: int, blocks: int) -> None:
    for number in range(first_block, first_block + blocks):
        block = Block(number * 1000, 1000, 10**18 + number * 125_000_000, NOISE)
        feeder.send(block_message(ARRAY, block, "a", type="i2"))


def band_entry(status: dict) -> dict:
    return next(p for p in status["processes"] if p["name"] == "band:far")


def test_band_joins_works_and_leaves(service: Service) -> None:
    """The service is ready without it, says so in /readyz, waits for it in `hold`, and misses it when it goes."""
    code, _, body = service.get("/readyz")
    assert (code, b"band:far" in body) == (503, True)
    with service.listener() as listener, service.feeder(queue=64) as feeder:
        assert band_entry(listener.of("status")[-1].header)["state"] == "starting"
        send(feeder, 0, 10)
        band = start_band(service)
        try:
            listener.wait_status("the far band up", lambda s: band_entry(s)["state"] == "up", 40)
            listener.wait_count("map/far", (10_000 - 4096) // 2048 + 1)
            listener.wait_count("map/main", (10_000 - 2048) // 1024 + 1)
            wait_until("ready", lambda: service.get("/readyz")[0] == 200, 10)
            maps = listener.of("map/far")
            assert all(m.header["latency_ms"] > 0 for m in maps)
            assert [m.header["t"] - 10**18 for m in maps] == [k * 256_000_000 for k in range(len(maps))]
            check_leaving(band, listener)
        finally:
            band.kill()
            band.wait(10)


def check_leaving(band: subprocess.Popen[bytes], listener: Listener) -> None:
    os.kill(band.pid, signal.SIGTERM)
    assert band.wait(5) == 0
    listener.wait_status("the far band down", lambda s: band_entry(s)["state"] == "down", 20)


def test_unknown_band_is_said_with_the_names_that_are_there(service: Service) -> None:
    done = subprocess.run(
        [sys.executable, "-m", "soundrose", "band", "--config", str(service.config), "--name", "fat"],
        env=service.environment, capture_output=True, text=True, timeout=30, check=False,
    )  # fmt: skip
    assert done.returncode == 2
    assert "'fat'" in done.stderr
    assert "main, far" in done.stderr
