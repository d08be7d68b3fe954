"""`WS /api/v1/live` of a real server on loopback, read by the stock websockets client."""

import asyncio
import contextlib
import json
import socket

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from live_rig import LIMIT_S, MemoryLog, Rig, levels, map_message, running, text_message
from websockets.asyncio.client import connect

from soundrose._version import __version__

STARTED = 1_796_133_600_123_456_789


def status(seq=0):
    return text_message("status", seq, service_start=STARTED, state="running", processes=[])


def live(scenario, log=None):
    """Run `scenario(rig)` against a server."""

    async def run():
        async with running(log) as rig:
            await asyncio.wait_for(scenario(rig), 4 * LIMIT_S)

    asyncio.run(run())


def test_hello_comes_first_and_names_the_service():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            assert client.hello == {
                "kind": "hello", "v": 1, "version": __version__, "service_start": None, "bands": ["main", "low"],
                "cursor": None,
            }  # fmt: skip
        rig.put(status())
        async with rig.client() as client:
            assert client.hello["service_start"] == STARTED
            assert client.hello["service_start_time"] == "2026-12-01T14:00:00.123456Z"

    live(scenario)


def test_subprotocol_is_taken_up_if_it_is_offered():
    async def scenario(rig: Rig):
        async with rig.client(subprotocols=["other", "soundrose.v1"]) as client:
            assert client.connection.subprotocol == "soundrose.v1"
        async with rig.client(subprotocols=["other"]) as client:
            assert client.connection.subprotocol is None

    live(scenario)


def test_newest_of_all_that_is_asked_for_follows_at_once():
    async def scenario(rig: Rig):
        alert = {"t": 5, "priority": "warning", "category": "B", "cause": "dead-hydrophones"}
        rig.put(
            status(), text_message("health", 3, t=STARTED, used=48, channels=[]), text_message("track", items=[]),
            text_message("alert", 0, id="a", state="active-unacknowledged", **alert),
            text_message("alert", 1, id="b", state="active-unacknowledged", **alert),
            text_message("alert", 2, id="a", state="normal", **alert),
            map_message(7), map_message(8), map_message(2, band="low"),
        )  # fmt: skip
        async with rig.client() as client:
            await client.ask("map", "detection", "track", "health", "levels", "status", "alert")
            frames = [await client.frame() for _ in range(6)]
            texts = [json.loads(frame) for frame in frames if isinstance(frame, str)]
            assert sorted(text["kind"] for text in texts) == ["alert", "health", "status", "track"]
            found = {text["kind"]: text for text in texts}
            assert (found["alert"]["id"], found["health"]["seq"], found["health"]["time"]) == (
                "b", 3, "2026-12-01T14:00:00.123456Z",
            )  # fmt: skip
            assert sum(isinstance(frame, bytes) for frame in frames) == 2
        async with rig.client() as client:
            await client.ask("map", bands=["low"])
            assert (await client.map())[0]["seq"] == 2
            rig.put(status(1), map_message(9), map_message(3, band="low"))
            assert (await client.map())[0]["seq"] == 3  # nothing else was asked for

    live(scenario)


def test_text_frames_are_the_published_map_with_times_as_text():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("levels", "detection")
            await _asked(rig, client)
            extra = [1, None, "\u00b5"]
            rig.put(text_message("levels", 4, t=STARTED, extra=extra), text_message("detection", items=[]))
            frames = [await client.text(), await client.text()]
            found = next(frame for frame in frames if frame["kind"] == "levels")
            assert found == {
                "v": 1, "kind": "levels", "array": "aft", "seq": 4, "start": "00000000000000aa", "t": STARTED,
                "time": "2026-12-01T14:00:00.123456Z", "extra": [1, None, "\u00b5"],
            }  # fmt: skip

    live(scenario)


async def _asked(rig, client):
    """Until the server has taken what this client sent: it answers a mistake in its order."""
    await client.send("?")
    assert (await client.text())["status"] == 422


def test_encodings_of_the_same_map_agree_and_data_can_be_used_where_it_lies():
    async def scenario(rig: Rig):
        rig.put(map_message(5))
        async with rig.client() as client:
            await client.ask("map", bands=["main"], encoding="f4")
            header, whole, frame = await client.map()
            assert header["seq"] == 5
            assert np.array_equal(whole, levels(5))
            assert whole.base is not None
            assert frame.index(levels(5).tobytes()) % 8 == 0
            await client.ask("map", bands=["main"], encoding="u1")
            header, coarse, _ = await client.map()
            read = header["floor_db"] + header["step_db"] * coarse.astype(np.float64)
            assert np.abs(read - levels(5)).max() <= header["step_db"] / 2 + 1e-4

    live(scenario)


def test_request_replaces_the_one_before():
    async def scenario(rig: Rig):
        rig.put(map_message(0), map_message(0, band="low"))
        async with rig.client() as client:
            await client.ask("map", "status", bands=["main"], bins=5)
            assert (await client.map())[0]["shape"] == [19, 5]
            await client.ask("map", bands=["low"], bins=3, beams=2, encoding="u1")
            header, _, _ = await client.map()
            assert (header["band"], header["shape"], header["encoding"]) == ("low", [2, 3], "u1")
            rig.put(status(), map_message(1), map_message(1, band="low"))
            assert (await client.map())[0]["seq"] == 1
            await client.send({"subscribe": []})
            await _asked(rig, client)
            rig.put(map_message(2, band="low"))
            await _asked(rig, client)

    live(scenario)


BAD = ["", "{", "[]", '{"subscribe": ["x"]}', '{"subscribe": ["map"], "map": {"bins": 0}}', b"\x00\x01"]


def test_bad_request_is_answered_and_changes_nothing():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("map", bands=["main"], bins=5)
            for seq, request in enumerate(BAD):
                await client.send(request)
                error = await client.text()
                assert set(error) == {"kind", "status", "title", "detail"}
                assert (error["kind"], error["status"]) == ("error", 422)
                rig.put(map_message(seq))
                assert (await client.map())[0]["shape"] == [19, 5]

    live(scenario)


def test_the_tenth_bad_request_is_answered_and_the_connection_closed_with_1008():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            for _ in range(9):
                await client.send("{")
                await client.text()
            await client.ask("status")
            rig.put(status())
            assert (await client.text())["kind"] == "status"
            await client.send("{")
            assert (await client.text())["kind"] == "error"
            assert await client.closed() == (1008, "10 bad requests")

    live(scenario)


def test_request_of_64_kib_is_read_and_of_one_byte_more_closes_with_1008():
    async def scenario(rig: Rig):
        good = '{"subscribe": ["status"], "x": ""}'
        for size in (65536, 65537, 200_000, 3_000_000):
            async with rig.client() as client:
                rig.put(status())
                with contextlib.suppress(OSError):  # the largest is not taken whole
                    await client.send(good.replace('""', json.dumps("a" * (size - len(good)))))
                if size == 65536:
                    assert (await client.text())["kind"] == "status"
                else:
                    assert await client.closed() == (1008, "a request may have at most 65536 bytes")

    live(scenario)


def test_range_that_holds_no_bin_is_told_when_the_map_is_there():
    async def scenario(rig: Rig):
        rig.put(map_message(0))
        async with rig.client() as client:
            await client.ask("map", bands=["main"], f_min=63, f_max=64)
            error = await client.text()
            assert error["status"] == 422
            assert "no bin lies between" in error["detail"]
            await client.ask("map", bands=["main"], f_min=62, f_max=64)
            assert (await client.map())[0]["shape"] == [19, 1]

    live(scenario)


@pytest.mark.parametrize(("source_hz", "rate_hz"), [(8, 5), (8, 8), (20, 1), (4, 10)])
def test_rate_asked_for_is_kept_and_every_map_left_out_is_counted(source_hz, rate_hz):
    async def scenario(rig: Rig):
        rig.put(map_message(0, heard_s=0.0))
        async with rig.client() as client:
            await client.ask("map", bands=["main"], rate_hz=rate_hz, bins=1, beams=1)
            places = [(await client.map())[0]["seq"]]
            for seq in range(1, 81):
                rig.put(map_message(seq, heard_s=seq / source_hz))
                if len(next(iter(rig.hub.clients))._mailbox):  # it passed; nothing has been sent yet
                    header = (await client.map())[0]
                    assert header["skipped"] == header["seq"] - places[-1] - 1
                    places.append(header["seq"])
            assert len(places) - 1 == pytest.approx(80 * min(1.0, rate_hz / source_hz), abs=1)

    live(scenario)


def test_maps_that_never_reached_the_server_count_as_left_out():
    async def scenario(rig: Rig):
        rig.put(map_message(0))
        async with rig.client() as client:
            await client.ask("map", bands=["main"], bins=1)
            await client.map()
            for seq, start, skipped in [(1, "a", 0), (5, "a", 3), (0, "b", 0), (2, "b", 1)]:
                rig.put(map_message(seq, start=start * 16))
                if (seq, start) == (1, "a"):
                    assert (await client.map())[0]["skipped"] == 0
                else:
                    header = (await client.map())[0]
                    assert (header["seq"], header["skipped"]) == (seq, skipped)

    live(scenario)


def test_client_over_the_limit_is_told_and_others_stay(monkeypatch):
    monkeypatch.setattr("soundrose.serve.live_hub.CLIENTS_MOST", 2)

    async def scenario(rig: Rig):
        async with rig.client() as first, rig.client():
            async with connect(rig.address) as third:
                await asyncio.wait_for(third.wait_closed(), LIMIT_S)
                assert third.close_code == 1013
                assert "clients are connected" in third.close_reason
            rig.put(status())
            await first.ask("status")
            assert (await first.text())["kind"] == "status"
        while rig.hub.clients:
            await asyncio.sleep(0.01)
        async with rig.client() as again:
            assert again.hello["kind"] == "hello"

    live(scenario)


def test_end_of_the_service_closes_every_client_with_1012():
    async def scenario(rig: Rig):
        async with rig.client() as first, rig.client() as second:
            await first.ask("map")
            rig.server.should_exit = True
            assert [await client.closed() for client in (first, second)] == [(1012, ""), (1012, "")]

    live(scenario)


def test_vanished_client_leaves_nothing_behind():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("map")
            await _asked(rig, client)
            client.connection.transport.abort()
            while rig.hub.clients:
                rig.put(map_message(0))
                await asyncio.sleep(0.01)

    live(scenario)


def test_many_requests_at_once_are_all_answered_in_order():
    async def scenario(rig: Rig):
        rig.put(map_message(0))
        async with rig.client() as client:
            for bins in range(1, 31):  # over the burst: the rest is read more slowly, not refused
                await client.ask("map", bands=["main"], bins=bins, beams=1)
            while (await client.map())[0]["shape"] != [1, 25]:  # 25 groups of 5: the answer to 30, of 125 bins
                pass

    live(scenario)


FRAMES = st.lists(
    st.one_of(
        st.text(max_size=50), st.binary(max_size=50),
        st.just('{"subscribe": ["map", "status"]}'), st.just('{"subscribe": []}'),
        st.sampled_from(["[" * 5000, '{"subscribe": ["map"], "map": {"bins": 1e400}}', '{"since": "\\ud800"}']),
    ),
    max_size=12,
)  # fmt: skip


def test_whatever_is_sent_the_server_answers_or_closes_with_1008():
    async def scenario(rig: Rig):
        rig.put(status(), map_message(0))

        async def attempt(frames):
            async with rig.client() as client:
                with contextlib.suppress(Exception):
                    for frame in frames:
                        await client.send(frame)
                await client.connection.close()
                code, _ = await client.closed()
                assert code in (1000, 1008)

        loop = asyncio.get_running_loop()

        @given(FRAMES)
        @settings(max_examples=40)
        def fuzz(frames):
            asyncio.run_coroutine_threadsafe(attempt(frames), loop).result(LIMIT_S)

        await asyncio.to_thread(fuzz)
        async with rig.client() as client:
            await client.ask("status")
            assert (await client.text())["kind"] == "status"

    live(scenario)


def test_torn_handshake_and_plain_garbage_do_no_harm():
    async def scenario(rig: Rig):
        head = b"GET /api/v1/live HTTP/1.1\r\n"
        for data in (b"", head, b"\x00" * 100, head + b"Host: x\r\n\r\n", head + b"Upgrade: websocket\r\n\r\n"):
            with socket.create_connection(("127.0.0.1", rig.port)) as torn:
                torn.sendall(data)
        async with rig.client() as client:
            assert client.hello["kind"] == "hello"

    live(scenario, MemoryLog())
