"""process: asks contacts to do something, and waits no longer than two seconds for the answer."""

import asyncio
import contextlib
import secrets
from collections.abc import Mapping
from typing import Any

import zmq
import zmq.asyncio

from soundrose.contact.commands import Answer, Command, decode_answer, encode_command
from soundrose.errors import WireError
from soundrose.product.connecting import connect_to
from soundrose.serve.problems import Problem

__all__ = ["ANSWER_S", "CommandClient"]

ANSWER_S = 2.0  #: contract: no answer by then is a 503
_AGAIN_S = 0.5  #: asked again this often meanwhile, with the same id: contacts may have been started anew
_MOST_WAITING = 256


class CommandClient:
    """A DEALER socket to contacts. Every command has an id, and contacts does an id once, however often it is asked.

    endpoint : where contacts listens (`stream.commands`, its '{pid}' filled in).
    """

    def __init__(self, context: zmq.asyncio.Context, endpoint: str, answer_s: float = ANSWER_S) -> None:
        self._socket = context.socket(zmq.DEALER)
        self._socket.setsockopt(zmq.LINGER, 0)
        self._socket.setsockopt(zmq.IMMEDIATE, 1)  # to a contacts that is there; else the next try finds it
        self._socket.setsockopt(zmq.RECONNECT_IVL, 20)
        self._socket.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
        connect_to(self._socket, endpoint)
        self._answer_s = answer_s
        self._waiting: dict[str, asyncio.Future[Answer]] = {}
        self._reader: asyncio.Task[None] | None = None

    async def start(self) -> None:
        """Begin to take answers."""
        self._reader = asyncio.create_task(self._read(), name="command answers")

    async def stop(self) -> None:
        if self._reader is not None:
            self._reader.cancel()
            with contextlib.suppress(asyncio.CancelledError):
                await self._reader
        self._socket.close()

    async def ask(self, name: str, arguments: Mapping[str, Any], command_id: str | None = None) -> Answer:
        """The answer of contacts, whatever its status.

        command_id : 1 to 128 characters; the same for the same thing asked again. None: one of our own.

        Raises
        ------
        Problem : 503 if there is no answer in time, or too many wait already.
        """
        command = Command(command_id or secrets.token_hex(16), name, arguments)
        future = self._waiting.get(command.id)
        if future is None:
            if len(self._waiting) >= _MOST_WAITING:
                raise Problem(503, "too many commands wait for their answers; ask again", headers={"Retry-After": "1"})
            future = self._waiting[command.id] = asyncio.get_running_loop().create_future()
        try:
            async with asyncio.timeout(self._answer_s):
                return await self._insist(encode_command(command), future)
        except TimeoutError:
            raise Problem(
                503,
                f"no answer within {self._answer_s:g} s; it may have been done all the same:"
                " ask again with the same Idempotency-Key, and it is done once",
                headers={"Retry-After": "1"},
            ) from None
        finally:
            if self._waiting.get(command.id) is future:
                del self._waiting[command.id]

    async def _insist(self, data: bytes, future: asyncio.Future[Answer]) -> Answer:
        while True:
            with contextlib.suppress(zmq.Again):
                await self._socket.send(data, zmq.NOBLOCK)
            done, _ = await asyncio.wait([future], timeout=_AGAIN_S)
            if done:
                return future.result()

    async def _read(self) -> None:
        while True:
            try:
                answer = decode_answer(await self._socket.recv())
            except WireError:  # from an internal address; whoever waits is told 503
                continue
            future = self._waiting.get(answer.id)
            if future is not None and not future.done():
                future.set_result(answer)
