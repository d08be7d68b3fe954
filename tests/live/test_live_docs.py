"""docs/live.md says what is so: its limits are those in force, its examples run."""

import asyncio
import contextlib
import io
import json
import re
from itertools import islice
from pathlib import Path

import pytest
from live_rig import LIMIT_S, MemoryLog, Rig, map_message, running

import soundrose_client
from soundrose.errors import UsageError
from soundrose.serve.live import REQUESTS_BURST, REQUESTS_HZ, SEND_S
from soundrose.serve.live_client import BAD_MOST
from soundrose.serve.live_frames import STEPS_DB
from soundrose.serve.live_hub import CLIENTS_MOST
from soundrose.serve.live_request import RATE_MOST_HZ, REQUEST_MOST_BYTES, TOPICS, parse_request
from soundrose.serve.mailbox import EVENTS_MOST
from soundrose.serve.websocket import CLOSE_S, LINGER_S, PING_S, WEBSOCKET_OPTIONS

TEXT = (Path(__file__).parents[2] / "docs" / "live.md").read_text()
BANDS = {"main": (50.0, 4000.0), "low": (50.0, 500.0)}


@pytest.mark.parametrize(
    "line",
    [
        f"| clients at once | {CLIENTS_MOST} |",
        f"| time for a frame to leave for the client | {SEND_S:g} s |",
        f"| events that wait for one client | {EVENTS_MOST} |",
        f"| answer to a ping, sent every {PING_S:g} s | {PING_S:g} s |",
        f"| a request | {REQUEST_MOST_BYTES} bytes |",
        f"| bad requests on one connection | {BAD_MOST} |",
        f"| requests of one client | {REQUESTS_BURST} at once, then {REQUESTS_HZ:g} a second |",
        f"| closing handshake | {CLOSE_S:g} s; {LINGER_S:g} s after 1013 |",
        f"above 0, at most {RATE_MOST_HZ:g} |",
        f"The step is {STEPS_DB[0]} dB where that covers the whole map, and {STEPS_DB[1]} dB otherwise",
        ", ".join(f"`{topic}`" for topic in TOPICS),
    ],
)
def test_limit_is_the_one_in_force(line):
    assert line in TEXT
    assert (WEBSOCKET_OPTIONS["ws_ping_interval"], WEBSOCKET_OPTIONS["ws_ping_timeout"]) == (PING_S, PING_S)


def test_request_in_the_text_is_taken_and_the_error_in_the_text_is_given():
    objects = [json.loads(block) for block in re.findall(r"```json\n(.*?)```", TEXT, re.S)]
    hello, request, error = objects
    assert parse_request(json.dumps(request), BANDS).reduction.bins == 256
    assert hello["kind"] == "hello"
    with pytest.raises(UsageError) as raised:
        parse_request('{"subscribe": [], "map": {"bins": 0, "rate_hz": true}}', BANDS)
    assert str(raised.value) == error["detail"]


def test_examples_in_python_run(monkeypatch):
    examples = re.findall(r"```python\n(.*?)```", TEXT, re.S)
    assert len(examples) == 2
    monkeypatch.setattr(soundrose_client.Live, "__iter__", lambda live: islice(iter(live.receive, None), 2))

    def run(source: str) -> str:
        said = io.StringIO()
        with contextlib.redirect_stdout(said):
            exec(compile(source, "docs/live.md", "exec"), {})
        return said.getvalue()

    async def scenario(rig: Rig, log: MemoryLog) -> None:
        rig.put(map_message(0))
        place = f"ws://127.0.0.1:{rig.port}"
        first, second = (example.replace("ws://127.0.0.1:8080", place) for example in examples)
        reading = asyncio.create_task(asyncio.to_thread(run, first))
        while not any(client.request.topics for client in rig.hub.clients):
            await asyncio.sleep(0.01)
        cursor = log.add("alert", text="a")
        said = await asyncio.wait_for(reading, LIMIT_S)
        assert "Loudest(beam=6" in said
        assert cursor in said
        assert "(19, 125)" in await asyncio.wait_for(asyncio.to_thread(run, second), LIMIT_S)

    async def main() -> None:
        log = MemoryLog()
        async with running(log) as rig:
            await scenario(rig, log)

    asyncio.run(main())
