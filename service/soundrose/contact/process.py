"""process: contacts: the event log's writer and the receiver of commands."""

import time
from collections import OrderedDict
from typing import Any

import zmq

from soundrose.child import Heartbeat, Orders, SlowLog, set_up_child
from soundrose.contact.changes import ChangeWatch
from soundrose.contact.commands import Answer, Command, decode_command, encode_answer, note_payload
from soundrose.errors import WireError
from soundrose.product.codec import decode_published
from soundrose.product.connecting import connect_to
from soundrose.product.proxy import bind_or_explain
from soundrose.store.event_log import Entry, EventLog
from soundrose.store.items import NewEvent
from soundrose.store.log_file import COMMANDS

__all__ = ["CommandDesk", "ContactsProcess", "main"]

_POLL_MS = 100
_PENDING_POLL_MS = 20  #: while somebody waits for the log
_BATCH = 64
_KNOWN = "changes"
_PENDING_MOST = 256


class CommandDesk:
    """Does each command once. Ids are remembered in the log, so a repeat gets the first answer after a restart too."""

    def __init__(self, log: EventLog) -> None:
        self._log = log
        self._done: OrderedDict[str, Answer] = OrderedDict()
        self._pending: dict[str, tuple[Entry, list[bytes]]] = {}
        for name, items in log.answered().items():
            self._remember(Answer(name, 201, items[0] if items else {}))

    @property
    def waiting(self) -> bool:
        return bool(self._pending)

    def take(self, asker: bytes, command: Command, host_ns: int) -> Answer | None:
        """The answer, or None while the log has not written it yet (`written` has it later)."""
        if (done := self._done.get(command.id)) is not None:
            return done
        if (pending := self._pending.get(command.id)) is not None:
            if asker not in pending[1]:
                pending[1].append(asker)
            return None
        if command.name != "note":
            return Answer(command.id, 404, {"detail": f"no command is called {command.name!r}"})
        try:
            payload = note_payload(command.arguments)
        except WireError as error:
            return Answer(command.id, 422, {"detail": error.detail})
        entry = None
        if len(self._pending) < _PENDING_MOST:
            entry = self._log.append_all([NewEvent("note", host_ns, payload)], command=command.id, urgent=True)
        if entry is None:
            return Answer(command.id, 503, {"detail": "the event log takes nothing at the moment; ask again"})
        self._pending[command.id] = (entry, [asker])
        return None

    def written(self) -> list[tuple[list[bytes], Answer]]:
        """Answers that the log has written by now, with those who wait for them."""
        ready = []
        for name, (entry, askers) in list(self._pending.items()):
            if entry.items is not None:
                del self._pending[name]
                answer = Answer(name, 201, entry.items[0])
                self._remember(answer)
                ready.append((askers, answer))
        return ready

    def _remember(self, answer: Answer) -> None:
        self._done[answer.id] = answer
        while len(self._done) > COMMANDS:
            self._done.popitem(last=False)


class ContactsProcess:
    """The sockets around a `ChangeWatch`, a `CommandDesk` and the event log."""

    def __init__(self, orders: Orders, context: "zmq.Context[zmq.Socket[bytes]]") -> None:
        self._slow = SlowLog()
        self._log = EventLog(orders.settings.store)
        self._watch = ChangeWatch(self._log.kept(_KNOWN))
        self._kept = self._watch.known
        self._desk = CommandDesk(self._log)
        self._news = context.socket(zmq.SUB)
        self._commands = context.socket(zmq.ROUTER)
        try:
            self._set_up_sockets(orders)
        except BaseException:
            self.close()
            raise

    def _set_up_sockets(self, orders: Orders) -> None:
        self._news.setsockopt(zmq.RCVHWM, 256)
        self._news.setsockopt(zmq.RECONNECT_IVL, 20)
        self._news.setsockopt(zmq.RECONNECT_IVL_MAX, 200)
        for topic in (b"health", b"status"):
            self._news.setsockopt(zmq.SUBSCRIBE, topic)
        self._commands.setsockopt(zmq.RCVHWM, 256)
        self._commands.setsockopt(zmq.MAXMSGSIZE, 2**17)
        for socket in (self._news, self._commands):
            socket.setsockopt(zmq.LINGER, 100)
        bind_or_explain(self._commands, orders.endpoints["commands"], "stream.commands")
        connect_to(self._news, orders.endpoints["publish"])
        self._poller = zmq.Poller()
        self._poller.register(self._news, zmq.POLLIN)
        self._poller.register(self._commands, zmq.POLLIN)

    def turn(self) -> None:
        """Once round: take what came, or wait a little for it; answer what the log has written."""
        came = dict(self._poller.poll(_PENDING_POLL_MS if self._desk.waiting else _POLL_MS))
        if self._commands in came:
            self._take_commands()
        if self._news in came:
            self._take_news()
        for askers, answer in self._desk.written():
            for asker in askers:
                self._answer(asker, answer)

    def facts(self) -> dict[str, Any]:
        return {"log": self._log.facts()}

    def end(self) -> None:
        """The service ends in order: say so in the log."""
        self._take_news()
        self._write(self._watch.end(time.time_ns()))

    def close(self) -> None:
        self._news.close()
        self._commands.close()
        self._log.close()

    def _take_news(self) -> None:
        for _ in range(_BATCH):
            try:
                frames = self._news.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                return
            try:
                topic, header, _ = decode_published(frames)
                events = self._watch.push(topic, header, time.time_ns())
            except WireError as error:
                self._slow.warn("published", str(error))
                continue
            self._write(events)

    def _write(self, events: list[NewEvent]) -> None:
        """Events and what is known now go into the log together: a restart repeats and forgets nothing."""
        known = self._watch.known
        if not events and known == self._kept:
            return
        if self._log.append_all(events, keep={_KNOWN: known}) is None:
            self._slow.warn("lost", f"event log: no room for {len(events)} events; they are lost")
        self._kept = known

    def _take_commands(self) -> None:
        for _ in range(_BATCH):
            try:
                asker, *parts = self._commands.recv_multipart(zmq.NOBLOCK)
            except zmq.Again:
                return
            try:
                command = decode_command(parts[0] if len(parts) == 1 else b"")
            except WireError as error:
                self._slow.warn("command", f"a command was not taken: {error}")
                continue
            answer = self._desk.take(asker, command, time.time_ns())
            if answer is not None:
                self._answer(asker, answer)

    def _answer(self, asker: bytes, answer: Answer) -> None:
        try:
            self._commands.send_multipart([asker, encode_answer(answer)], zmq.NOBLOCK)
        except zmq.ZMQError:  # the asker is gone or does not read; it asks again with the same id
            pass


def main(orders: Orders) -> int:
    """Write the log and take commands until the lifeline ends."""
    lifeline = set_up_child(orders)
    context: zmq.Context[zmq.Socket[bytes]] = zmq.Context()
    heart = Heartbeat(context, orders.endpoints["control"], orders.name)
    heart.beat(ready=False)
    process: ContactsProcess | None = None
    try:
        process = ContactsProcess(orders, context)
        while not lifeline.ending.is_set():
            process.turn()
            if heart.due:
                heart.beat(ready=True, facts=process.facts())
        process.end()
    finally:
        if process is not None:
            process.close()
        heart.close()
        context.term()
    return 0
