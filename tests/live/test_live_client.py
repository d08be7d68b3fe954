"""The Python client against a real server: every encoding, restarts of the service, events without a hole."""

import asyncio
import threading
from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from live_rig import LIMIT_S, MemoryLog, Rig, levels, map_message, running, text_message

from soundrose_client import AsyncLive, Event, Hole, Live, MapMessage, ReceiveTimeout, ServiceError


def live(scenario: Callable[..., Any], *logs: MemoryLog) -> None:
    async def run():
        async with running(*logs) as rig:
            await asyncio.wait_for(scenario(rig), 4 * LIMIT_S)

    asyncio.run(run())


def address(rig: Rig) -> str:
    return f"ws://127.0.0.1:{rig.port}"


@pytest.mark.parametrize("encoding", ["f4", "u1"])
def test_maps_come_as_levels_whatever_the_encoding(encoding):
    async def scenario(rig: Rig):
        rig.put(map_message(4))
        async with AsyncLive(address(rig), "map", bands=["main"], encoding=encoding, timeout_s=LIMIT_S) as client:
            message = await client.receive()
            assert isinstance(message, MapMessage)
            assert (message.band, message.seq, message.missed, message.skipped) == ("main", 4, 0, 0)
            assert message.level_db.dtype == np.float32
            assert np.abs(message.level_db - levels(4)).max() <= (0 if encoding == "f4" else 0.1251)
            assert client.hello["bands"] == ["main", "low"]
            rig.put(map_message(5), map_message(9))
            messages = [await client.receive()]
            if messages[-1].seq != 9:
                messages.append(await client.receive())
            assert sum(m.skipped for m in messages) + len(messages) == 5

    live(scenario)


def test_synchronous_client_reads_the_same_in_a_thread():
    async def scenario(rig: Rig):
        rig.put(map_message(1), text_message("status", state="running", processes=[]))
        seen: list[Any] = []

        def read():
            with Live(address(rig), ("map", "status"), bands=["main"], bins=5, timeout_s=LIMIT_S) as client:
                for _, message in zip(range(2), client, strict=False):
                    seen.append(message)

        await asyncio.to_thread(read)
        while rig.hub.clients:  # it has closed its connection
            await asyncio.sleep(0.01)
        assert sorted(message.kind for message in seen) == ["map", "status"]
        assert next(m for m in seen if m.kind == "map").level_db.shape == (19, 5)

    live(scenario)


def test_events_are_exact_over_an_end_and_a_new_start_of_the_service():
    log = MemoryLog()

    async def run():
        seen: list[int] = []
        async with running(log) as rig:
            port = rig.port
            log.add("alert", n=0)
            client = AsyncLive(address(rig), "alert", timeout_s=LIMIT_S)
            reading = asyncio.create_task(_collect(client, seen, 6))
            while not any(c.request.topics and c.follows for c in rig.hub.clients):
                await asyncio.sleep(0.01)
            log.add("alert", n=1)
            log.add("alert", n=2)
            while len(seen) < 2:
                await asyncio.sleep(0.01)
        log.add("alert", n=3)  # while no service is there
        log.add("alert", n=4)
        async with running(log, port) as rig:
            while not any(c.request.topics and c.follows for c in rig.hub.clients):
                await asyncio.sleep(0.01)
            log.add("alert", n=5)
            log.add("alert", n=6)
            await asyncio.wait_for(reading, LIMIT_S)
            await client.close()
        assert seen == [1, 2, 3, 4, 5, 6]  # what was logged before the first greeting was not asked for
        assert client.counters.connections == 2
        assert client.cursor == log.items[-1]["cursor"]

    asyncio.run(run())


async def _collect(client: AsyncLive, seen: list[int], count: int) -> None:
    async for message in client:
        assert isinstance(message, Event)
        seen.append(message.header["n"])
        if len(seen) == count:
            return


def test_maps_lost_between_two_connections_are_reported():
    holes: list[Hole] = []

    async def run():
        async with running() as rig:
            port = rig.port
            rig.put(map_message(0))
            client = AsyncLive(address(rig), "map", bands=["main"], timeout_s=LIMIT_S, on_hole=holes.append)
            assert (await client.receive()).seq == 0
            waiting = asyncio.create_task(client.receive())
        async with running(None, port) as rig:
            rig.put(map_message(0))  # the same once more: passed over
            while not any(c.request.topics for c in rig.hub.clients):
                await asyncio.sleep(0.01)
            rig.put(map_message(7))
            message = await asyncio.wait_for(waiting, LIMIT_S)
            rig.put(map_message(0, start="b" * 16))
            anew = await client.receive()
            await client.close()
        assert (message.seq, message.missed + message.skipped) == (7, 6)
        assert anew.missed is None
        assert [hole.missed for hole in holes] in ([message.missed, None], [None])
        assert holes[-1].start == "b" * 16

    asyncio.run(run())


def test_cursor_past_retention_is_a_hole_and_new_events_come():
    log, holes = MemoryLog(), []

    async def scenario(rig: Rig):
        for n in range(10):
            log.add("alert", n=n)
        log.floor = 5
        client = AsyncLive(address(rig), "alert", since=log.items[1]["cursor"], timeout_s=LIMIT_S, on_hole=holes.append)
        reading = asyncio.create_task(client.receive())
        while not any(c.request.topics for c in rig.hub.clients):
            await asyncio.sleep(0.01)
        log.add("alert", n=10)
        assert (await reading).header["n"] == 10
        assert [(hole.topic, hole.missed) for hole in holes] == [("events", None)]
        await client.close()

    live(scenario, log)


def test_refused_request_is_an_error_with_the_service_s_words():
    async def scenario(rig: Rig):
        async with AsyncLive(address(rig), "map", bins=0, timeout_s=LIMIT_S) as client:
            with pytest.raises(ServiceError, match=r"map\.bins is 0") as error:
                await client.receive()
            assert error.value.status == 422
        with pytest.raises(ServiceError, match=r"403|404") as error:
            await AsyncLive(f"{address(rig)}/elsewhere", "map", timeout_s=LIMIT_S).receive()

    live(scenario)


def test_silence_and_absence_end_in_a_timeout():
    async def scenario(rig: Rig):
        async with AsyncLive(address(rig), "alert", timeout_s=0.05) as client:
            with pytest.raises(ReceiveTimeout, match="nothing from"):
                await client.receive()
        return rig.port

    live(scenario)
    nobody = "ws://127.0.0.1:9"  # the port of a service long out of use
    with pytest.raises(ReceiveTimeout, match="last:"), Live(nobody, "map", timeout_s=0.1) as client:
        client.receive()
    with pytest.raises(ReceiveTimeout, match="last:"):
        asyncio.run(AsyncLive(nobody, "map", timeout_s=0.1).receive())


def test_synchronous_client_comes_back_by_itself():
    log = MemoryLog()

    async def run():
        seen: list[int] = []
        ready = threading.Event()

        def read(where):
            with Live(where, "alert", timeout_s=LIMIT_S, since=f"{1:016x}-0") as client:
                while len(seen) < 4:
                    seen.append(client.receive().header["n"])
                    ready.set()

        async with running(log) as rig:
            port = rig.port
            log.add("alert", n=1)
            reading = asyncio.create_task(asyncio.to_thread(read, address(rig)))
            await asyncio.to_thread(ready.wait, LIMIT_S)
        log.add("alert", n=2)
        log.add("alert", n=3)
        async with running(log, port):
            log.add("alert", n=4)
            await asyncio.wait_for(reading, LIMIT_S)
        assert seen == [1, 2, 3, 4]

    asyncio.run(run())
