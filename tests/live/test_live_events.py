"""Events over the live socket: with their cursors, in order, nothing twice, nothing missing."""

import asyncio

import pytest
from live_rig import LIMIT_S, MemoryLog, Rig, running, text_message

from soundrose.serve.events import EventTap
from soundrose.store.cursors import Cursor


def live(scenario, log):
    async def run():
        async with running(log) as rig:
            await asyncio.wait_for(scenario(rig), 4 * LIMIT_S)

    asyncio.run(run())


def cursor(row):
    return f"{1:016x}-{row}"


async def numbers(client, count):
    return [(await client.text())["n"] for _ in range(count)]


def test_events_before_and_after_the_request_come_once_and_in_order():
    log = MemoryLog()

    async def scenario(rig: Rig):
        for n in range(1, 8):
            log.add("alert", n=n)
        async with rig.client() as client:
            assert client.hello["cursor"] == cursor(7)
            await client.ask("alert", since=cursor(3))
            assert await numbers(client, 4) == [4, 5, 6, 7]
            log.add("alert", n=8)
            event = await client.text()
            assert (event["kind"], event["n"], event["cursor"]) == ("alert", 8, cursor(8))

    live(scenario, log)


def test_without_since_events_from_now_on_come():
    log = MemoryLog()

    async def scenario(rig: Rig):
        log.add("alert", n=1)
        async with rig.client() as client:
            await client.ask("alert")
            await client.send("?")
            assert (await client.text())["kind"] == "error"
            log.add("alert", n=2)
            log.add("track", n=3)
            log.add("alert", n=4)
            assert await numbers(client, 2) == [2, 4]

    live(scenario, log)


@pytest.mark.parametrize("during", [1, 3, 450])
def test_events_that_come_while_a_page_is_read_are_neither_lost_nor_doubled(during):
    """While each page is under way, events are logged, and handed on to those who follow, before it is delivered."""
    log = MemoryLog()

    async def scenario(rig: Rig):
        for n in range(1, 431):
            log.add("alert" if n % 2 else "track", n=n)
        left = [during] * 3

        async def meanwhile():
            for k in range(left.pop() if left else 0):
                log.add("alert" if k % 3 else "note", hand_on=k % 2 == 0, n=len(log.items) + 1)

        async with rig.client() as client:
            log.pause = meanwhile
            await client.ask("alert", since=cursor(0))
            while left:
                await asyncio.sleep(0.01)
            log.pause = None
            log.add("alert", n=len(log.items) + 1)
            expected = [item["n"] for item in log.items if item["kind"] == "alert"]
            assert await numbers(client, len(expected)) == expected

    live(scenario, log)


def test_event_that_is_logged_but_not_yet_handed_on_comes_once():
    log = MemoryLog()

    async def scenario(rig: Rig):
        log.add("alert", n=1)
        log.add("alert", n=2, hand_on=False)
        async with rig.client() as client:
            await client.ask("alert", since=cursor(0))
            assert await numbers(client, 1) == [1]
            while not all(c.follows for c in rig.hub.clients):
                await asyncio.sleep(0.01)
            log.add("alert", n=3)
            assert await numbers(client, 2) == [2, 3]

    live(scenario, log)


def test_events_are_exact_over_reconnections_while_they_come_in():
    log, total = MemoryLog(), 300

    async def scenario(rig: Rig):
        async def write():
            for n in range(1, total + 1):
                log.add("alert", n=n)
                await asyncio.sleep(0.001)

        writing = asyncio.create_task(write())
        seen: list[int] = []
        place = cursor(0)
        while len(seen) < total:
            async with rig.client(max_queue=None) as client:  # it reads on while it closes
                await client.ask("alert", since=place)
                for _ in range(min(23, total - len(seen))):
                    event = await client.text()
                    seen.append(event["n"])
                    place = event["cursor"]
        await writing
        assert seen == list(range(1, total + 1))

    live(scenario, log)


def test_asking_anew_begins_at_the_new_cursor_and_drops_what_waited():
    log = MemoryLog()

    async def scenario(rig: Rig):
        for n in range(1, 1001):
            log.add("alert", n=n)
        async with rig.client() as client:
            await client.ask("alert", since=cursor(0))
            await client.ask("alert", since=cursor(990))
            seen = [await numbers(client, 1)]
            while seen[-1] != [1000]:
                seen.append(await numbers(client, 1))
            assert [n for (n,) in seen][-10:] == list(range(991, 1001))
            log.add("alert", n=1001)
            assert await numbers(client, 1) == [1001]

    live(scenario, log)


def test_asking_for_other_topics_goes_on_without_a_hole():
    log = MemoryLog()

    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("alert")
            await client.send("?")
            await client.text()
            log.add("alert", n=1)
            await client.ask("alert", "track")
            log.add("alert", n=2)
            assert await numbers(client, 2) == [1, 2]

    live(scenario, log)


def test_cursor_that_cannot_be_followed_is_told_and_changes_nothing():
    log = MemoryLog()

    async def scenario(rig: Rig):
        for n in range(1, 11):
            log.add("alert", n=n)
        log.floor = 5
        async with rig.client() as client:
            await client.ask("alert", since=cursor(8))
            assert await numbers(client, 2) == [9, 10]
            await client.ask("status", since=cursor(2))
            error = await client.text()
            assert (error["status"], error["title"]) == (410, "Gone")
            await client.ask("status", since="nonsense")
            assert (await client.text())["status"] == 422
            log.add("alert", n=11)
            assert await numbers(client, 1) == [11]

    live(scenario, log)


def test_without_a_log_since_is_refused_and_published_events_come_as_they_are():
    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("alert", since=cursor(0))
            assert (await client.text())["status"] == 503
            await client.ask("alert", "detection")
            await client.send("?")
            await client.text()
            rig.put(*(text_message("detection", seq, items=[]) for seq in range(50)))
            assert [(await client.text())["seq"] for _ in range(50)] == list(range(50))

    live(scenario, None)


def test_with_a_log_an_event_is_not_sent_a_second_time_without_its_cursor():
    log = MemoryLog()

    async def scenario(rig: Rig):
        async with rig.client() as client:
            await client.ask("detection")
            await client.send("?")
            await client.text()
            rig.put(text_message("detection", items=[]))
            log.add("detection", n=1)
            assert await numbers(client, 1) == [1]

    live(scenario, log)


def test_client_that_falls_behind_with_events_is_closed_with_1013_and_another_is_not(monkeypatch):
    monkeypatch.setattr("soundrose.serve.live.SEND_S", 60.0)
    log = MemoryLog()

    async def scenario(rig: Rig):
        text = "x" * 2000
        async with rig.client(max_queue=1) as slow, rig.client() as good:
            await slow.ask("alert")
            await good.ask("alert")
            for client in (slow, good):
                await client.send("?")
                await client.text()
            sent = 0
            while all(not client.behind for client in rig.hub.clients):
                log.add("alert", n=(sent := sent + 1), text=text)
                assert (await good.text())["n"] == sent
            code, reason = await slow.closed()
            assert (code, "events wait" in reason) == (1013, True)
            log.add("alert", n=sent + 1)
            assert await numbers(good, 1) == [sent + 1]

    live(scenario, log)


def test_interface_is_that_of_the_event_log():
    """The stand-in of these tests has the calls of the real one, and cursors that the real one reads."""
    for name in ("newest_cursor", "since", "subscribe"):
        assert callable(getattr(EventTap, name))
    assert str(Cursor.parse(cursor(7))) == cursor(7)
