"""The same map by every way out: published, HTTP in three formats, live in two encodings, whole and reduced."""

import asyncio
import io
import json
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any
from urllib.parse import urlencode

import msgpack
import numpy as np
import pytest
import websockets
from rig import (
    ArrayModel,
    Block,
    Message,
    Service,
    Wave,
    block_message,
    encode_samples,
    note,
    plane_wave,
    sensor_noise,
)  # fmt: skip

ARRAY = ArrayModel()
PERIOD, BLOCK = 16_000, 1000
WHOLE: dict[str, Any] = {}
REDUCTIONS: list[dict[str, Any]] = [
    {"bins": 100_000, "beams": 100_000},
    {"bins": 64, "beams": 31},
    {"bins": 50, "beams": 97, "f_min": 300.0, "f_max": 1500.0},
    {"bins": 7, "beams": 5, "pick": "max"},
]


@dataclass
class Held:
    """A service that has stopped at a known map."""

    service: Service
    published: Message


@pytest.fixture(scope="module")
def held(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Held]:
    sea = plane_wave(Wave(64.0, 100.0, (150.0, 1900.0)), ARRAY.positions_m, PERIOD, ARRAY.rate_hz)
    sea += sensor_noise(ARRAY.channels, PERIOD, ARRAY.rate_hz, 80.0)
    with (
        Service(ARRAY.settings(), tmp_path_factory.mktemp("served")) as service,
        service.listener() as listener,
        service.feeder() as feeder,
    ):
        for at in range(0, PERIOD, BLOCK):
            data = encode_samples(sea[:, at : at + BLOCK] / ARRAY.full_scale_upa, "i2", "channel")
            t_ns = 10**18 + at * 125_000
            feeder.send(block_message(ARRAY, Block(at, BLOCK, t_ns, data), "a", type="i2"))
        feeder.send(note(ARRAY, "end", run="a"))
        maps = listener.wait_count("map/main", (PERIOD - 2048) // 1024 + 1)
        listener.wait_status("the end", lambda s: s["state"] == "waiting" and s["bands"]["main"]["maps"] == len(maps))
        yield Held(service, maps[-1])


@dataclass
class Reduced:
    level_db: np.ndarray
    f0_hz: float
    df_hz: float
    cone_deg: np.ndarray


def groups(count: int, most: int) -> list[slice]:
    size = -(-count // most)
    return [slice(at, min(at + size, count)) for at in range(0, count, size)]


def reduce(message: Message, wanted: dict[str, Any]) -> Reduced:
    """The contract's reduction, in float64."""
    low, high = wanted.get("f_min", 0.0), wanted.get("f_max", 1e9)
    inside = np.flatnonzero((message.frequencies_hz >= low) & (message.frequencies_hz <= high))
    power = 10 ** (message.level_db[:, inside].astype(np.float64) / 10)
    join = np.max if wanted.get("pick") == "max" else np.mean
    beams, bins = groups(power.shape[0], wanted["beams"]), groups(power.shape[1], wanted["bins"])
    value = np.array([[join(power[b, f]) for f in bins] for b in beams])
    frequencies = message.frequencies_hz[inside]
    step = bins[0].stop - bins[0].start
    cones = [np.degrees(np.arccos(np.clip(message.cosines[b].mean(), -1, 1))) for b in beams]
    return Reduced(10 * np.log10(value), frequencies[bins[0]].mean(), step * message.header["df_hz"], np.array(cones))


def check(header: dict[str, Any], level_db: np.ndarray, own: Reduced, published: Message, tolerance: float) -> None:
    for key in ("seq", "start", "t", "t_end", "run", "band", "unit"):
        assert header[key] == published.header[key], key
    assert header["shape"] == list(own.level_db.shape) == list(level_db.shape)
    assert header["f0_hz"] == pytest.approx(own.f0_hz, abs=1e-6)
    assert header["df_hz"] == pytest.approx(own.df_hz, abs=1e-9)
    np.testing.assert_allclose(header["cone_deg"], own.cone_deg, atol=1e-4)
    assert np.max(np.abs(level_db - own.level_db)) <= tolerance


@pytest.mark.parametrize("wanted", REDUCTIONS, ids=str)
@pytest.mark.parametrize("form", ["json", "msgpack", "npy"])
def test_http_gives_the_published_map(held: Held, form: str, wanted: dict[str, Any]) -> None:
    own = reduce(held.published, wanted)
    code, headers, body = held.service.get(f"/api/v1/map?{urlencode({'format': form, **wanted})}")
    assert code == 200, body
    if form == "npy":
        names = {name.lower(): value for name, value in headers.items()}
        header, levels = json.loads(names["soundrose-map"]), np.load(io.BytesIO(body))
        assert levels.dtype == np.float32
    elif form == "json":
        header = json.loads(body)
        levels = np.array(header["level_db"])
    else:
        header = msgpack.unpackb(body)
        levels = np.frombuffer(header["level_db"], "<f4").reshape(header["shape"])
    check(header, levels, own, held.published, 0.01)


async def live_map(url: str, wanted: dict[str, Any], encoding: str) -> bytes:
    async with websockets.connect(url, max_size=None) as socket:
        hello = json.loads(await asyncio.wait_for(socket.recv(), 20))
        assert hello["kind"] == "hello"
        await socket.send(json.dumps({"subscribe": ["map"], "map": {"encoding": encoding, **wanted}}))
        while True:
            message = await asyncio.wait_for(socket.recv(), 20)
            if isinstance(message, bytes):
                return message
            assert json.loads(message)["kind"] != "error", message


@pytest.mark.parametrize("wanted", REDUCTIONS, ids=str)
@pytest.mark.parametrize("encoding", ["f4", "u1"])
def test_live_socket_gives_the_published_map(held: Held, encoding: str, wanted: dict[str, Any]) -> None:
    """f4 within 0.01 dB; u1 within half a step from the floor up, and 0 below it."""
    own = reduce(held.published, wanted)
    frame = asyncio.run(live_map(held.service.http.replace("http", "ws") + "/api/v1/live", wanted, encoding))
    length = int.from_bytes(frame[:4], "little")
    assert (4 + length) % 8 == 0
    header = msgpack.unpackb(frame[4 : 4 + length])
    assert header["encoding"] == encoding
    assert header["skipped"] == 0
    if encoding == "f4":
        levels = np.frombuffer(frame, "<f4", offset=4 + length).reshape(header["shape"])
        check(header, levels, own, held.published, 0.01)
        return
    steps = np.frombuffer(frame, "u1", offset=4 + length).reshape(header["shape"])
    floor, step = header["floor_db"], header["step_db"]
    inside = own.level_db > floor
    levels = np.where(inside, floor + step * steps.astype(float), own.level_db)
    assert not steps[own.level_db < floor - step].any()
    assert inside.mean() > 0.9
    check(header, levels, own, held.published, step / 2 + 0.01)
