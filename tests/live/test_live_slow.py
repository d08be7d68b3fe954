"""Clients that do not read: closed with 1013 in a way that they see when they read again, and no burden to others."""

import asyncio
import contextlib
import json
import socket
from typing import Any

import pytest
from live_rig import LIMIT_S, Rig, levels, map_message, parse_map, running
from websockets.client import ClientProtocol
from websockets.frames import Frame, Opcode
from websockets.uri import parse_uri


class Silent:
    """A client that asks for maps and then leaves its socket alone until `wake`."""

    async def connect(self, address: str, request: dict[str, Any]) -> None:
        uri = parse_uri(address)
        own = socket.socket()
        own.setsockopt(socket.SOL_SOCKET, socket.SO_RCVBUF, 4096)
        own.setblocking(False)
        await asyncio.get_running_loop().sock_connect(own, (uri.host, uri.port))
        self._socket, self._protocol = own, ClientProtocol(uri)
        self._protocol.send_request(self._protocol.connect())
        await self._flush()
        while self._protocol.state.name == "CONNECTING":
            self._protocol.receive_data(await asyncio.get_running_loop().sock_recv(own, 512))
        self._protocol.send_text(json.dumps(request).encode())
        await self._flush()

    async def wake(self) -> tuple[list[dict[str, Any]], int]:
        """Read to the end: the headers of the maps, and the close code."""
        while data := await asyncio.get_running_loop().sock_recv(self._socket, 1 << 16):
            self._protocol.receive_data(data)
            with contextlib.suppress(OSError):
                await self._flush()  # the answer to a close frame
        self._socket.close()
        frames = [event for event in self._protocol.events_received() if isinstance(event, Frame)]
        maps = [parse_map(bytes(frame.data))[0] for frame in frames if frame.opcode is Opcode.BINARY]
        received = self._protocol.close_rcvd
        return maps, 1006 if received is None else received.code

    async def _flush(self) -> None:
        for data in self._protocol.data_to_send():
            await asyncio.get_running_loop().sock_sendall(self._socket, data)


REQUEST = {"subscribe": ["map"], "map": {"bands": ["main"]}}


async def feed(rig: Rig, good: Any, seqs: range) -> None:
    """Maps one by one, each read by the good client before the next is there."""
    for seq in seqs:
        rig.put(map_message(seq, level_db=levels(0, 145, 100)))
        assert (await good.map())[0]["seq"] == seq


def live(scenario):
    async def run():
        async with running() as rig:
            await asyncio.wait_for(scenario(rig), 4 * LIMIT_S)

    asyncio.run(run())


@pytest.fixture
def impatient(monkeypatch):
    monkeypatch.setattr("soundrose.serve.live.SEND_S", 0.3)


def test_silent_client_never_delays_another_and_is_closed_with_1013(impatient):
    async def scenario(rig: Rig):
        silent = Silent()
        await silent.connect(rig.address, REQUEST)
        async with rig.client() as good:
            await good.ask("map", bands=["main"])
            seq = 0
            while any(client.request.bands == () for client in rig.hub.clients):
                await asyncio.sleep(0.01)
            while sum(bool(client.request.topics) for client in rig.hub.clients) == 2:  # until the silent one is closed
                await feed(rig, good, range(seq, seq := seq + 5))
            await feed(rig, good, range(seq, seq + 5))
            maps, code = await silent.wake()
        assert code == 1013
        assert 1 <= len(maps) < seq
        assert [m["seq"] for m in maps] == sorted({m["seq"] for m in maps})

    live(scenario)


def test_slow_client_that_reads_again_in_time_gets_the_newest_map_with_an_exact_count(monkeypatch):
    monkeypatch.setattr("soundrose.serve.live.SEND_S", 60.0)

    async def scenario(rig: Rig):
        async with rig.client(max_queue=1) as slow, rig.client() as good:
            for client in (slow, good):
                await client.ask("map", bands=["main"])
                await client.send("?")
                await client.text()
            await feed(rig, good, range(400))
            seqs, skipped = [], 0
            while not seqs or seqs[-1] != 399:
                header = (await slow.map())[0]
                seqs.append(header["seq"])
                skipped += header["skipped"]
            assert len(seqs) + skipped == 400
            assert len(seqs) < 300  # most never left; the newest did, and not what was newest when it stopped reading
            assert seqs[-1] - seqs[-2] > 100

    live(scenario)


def test_client_that_answers_no_ping_is_closed_with_1013(monkeypatch):
    monkeypatch.setattr("soundrose.serve.live.SEND_S", 60.0)

    async def scenario(rig: Rig):
        rig.server.config.ws_ping_interval = rig.server.config.ws_ping_timeout = 0.2
        silent = Silent()
        await silent.connect(rig.address, {"subscribe": []})
        while rig.hub.clients == set():
            await asyncio.sleep(0.01)
        while rig.hub.clients:
            await asyncio.sleep(0.01)
        _, code = await silent.wake()
        assert code == 1013

    live(scenario)


def test_silent_client_that_never_wakes_is_cut_and_its_place_is_free_again(impatient, monkeypatch):
    monkeypatch.setattr("soundrose.serve.websocket.LINGER_S", 0.3)
    monkeypatch.setattr("soundrose.serve.live.LINGER_S", 0.3)

    async def scenario(rig: Rig):
        silent = Silent()
        await silent.connect(rig.address, REQUEST)
        while not rig.hub.clients:
            await asyncio.sleep(0.01)
        seq = 0
        while rig.hub.clients:
            rig.put(map_message(seq := seq + 1, level_db=levels(0, 145, 1500)))
            await asyncio.sleep(0.02)
        while rig.server.server_state.connections:
            await asyncio.sleep(0.01)
        silent._socket.close()

    live(scenario)
