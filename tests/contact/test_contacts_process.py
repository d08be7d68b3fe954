"""The sockets of contacts: messages in, events in the log, over restarts; commands answered."""

import asyncio
import threading
import time
import uuid
from dataclasses import replace
from pathlib import Path

import pytest
import zmq
import zmq.asyncio

from soundrose.child import Orders
from soundrose.contact.commands import Command, decode_answer, encode_command
from soundrose.contact.process import ContactsProcess
from soundrose.product.codec import Envelope, encode_plain
from soundrose.serve.commands import CommandClient
from soundrose.serve.problems import Problem
from soundrose.settings import parse_settings
from soundrose.settings_types import StoreSettings
from soundrose.store.event_reader import EventReader

SETTINGS = {
    "array": {"id": "aft", "hydrophones": 8, "spacing_m": 0.5},
    "bands": [{"name": "main", "band_hz": [100.0, 1000.0], "frame": 1024, "beams": 17}],
}


class Contacts:
    """The process's object, turned by a thread; and the socket that publishes to it."""

    def __init__(self, folder: Path) -> None:
        settings = replace(parse_settings(SETTINGS, folder, "aft.toml"), store=StoreSettings(str(folder)))
        self.folder, self.context = folder, zmq.Context()
        mark = uuid.uuid4().hex
        self.endpoints = {"commands": f"ipc://@contacts-{mark}-commands", "publish": f"ipc://@contacts-{mark}-publish"}
        self.orders = Orders("contacts", settings, self.endpoints)
        self.publisher = self.context.socket(zmq.XPUB)
        self.publisher.setsockopt(zmq.LINGER, 0)
        self.publisher.bind(self.endpoints["publish"])
        self.envelope = Envelope("aft", "0" * 16)
        self.ending = threading.Event()
        self.process: ContactsProcess | None = None

    def start(self) -> None:
        self.ending.clear()
        self.process = ContactsProcess(self.orders, self.context)
        self.thread = threading.Thread(target=self._turn)
        self.thread.start()
        for _ in range(2):  # both subscriptions have come
            assert self.publisher.poll(10_000)
            self.publisher.recv()

    def _turn(self) -> None:
        while not self.ending.is_set():
            self.process.turn()

    def stop(self, orderly: bool = True) -> None:
        self.ending.set()
        self.thread.join()
        if orderly:
            self.process.end()
        self.process.close()
        self.process = None
        while self.publisher.poll(100):
            self.publisher.recv()

    def publish(self, topic: str, **header) -> None:
        self.publisher.send_multipart(encode_plain(self.envelope, topic, header))

    def wait_for(self, kind: str, count: int) -> list[dict]:
        reader, until = EventReader(self.folder), time.monotonic() + 15
        try:
            while True:
                items, _ = reader.since(None, [kind], 1000)
                if len(items) >= count:
                    return items
                assert time.monotonic() < until, items
                threading.Event().wait(0.02)
        finally:
            reader.close()


@pytest.fixture
def contacts(tmp_path):
    found = Contacts(tmp_path)
    found.start()
    yield found
    if found.process is not None:
        found.stop()
    found.publisher.close()
    found.context.term()


def health(state, t):
    return {"t": t, "used": 1, "channels": [{"i": 0, "state": state, "level_db": 1.0, "why": None}]}


def test_changes_are_logged_and_a_restart_adds_none(contacts):
    contacts.publish("health", **health("good", 1))
    contacts.publish("health", **health("dead", 2))
    assert [(item["from"], item["to"], item["t"]) for item in contacts.wait_for("health", 1)] == [("good", "dead", 2)]
    contacts.stop(orderly=False)
    contacts.start()
    contacts.publish("health", **health("dead", 3))
    contacts.publish("health", **health("good", 4))
    items = contacts.wait_for("health", 2)
    assert [(item["from"], item["to"], item["t"]) for item in items] == [("good", "dead", 2), ("dead", "good", 4)]


def test_an_orderly_end_is_logged(contacts):
    contacts.publish(
        "status", service_start=5, state="waiting", run=None, gaps=0, lost_samples=0, restarts=0, processes=[]
    )
    assert contacts.wait_for("status", 2)[1]["what"] == "service-started"
    contacts.stop()
    assert contacts.wait_for("status", 3)[2]["what"] == "service-ended"


def test_nonsense_on_either_socket_is_passed_over(contacts):
    contacts.publisher.send_multipart([b"health", b"\xc1"])
    asker = contacts.context.socket(zmq.DEALER)
    asker.setsockopt(zmq.LINGER, 0)
    asker.connect(contacts.endpoints["commands"])
    asker.send(b"nonsense")
    asker.send_multipart([b"two", b"parts"])
    asker.send(encode_command(Command("a", "note", {"by": "me", "note": "x"})))
    assert asker.poll(10_000)
    assert decode_answer(asker.recv()).status == 201
    asker.close()
    contacts.publish("health", **health("dead", 2))
    contacts.wait_for("health", 1)


def test_facts_hold_the_figures_of_the_log(contacts):
    assert contacts.process.facts()["log"]["lost"] == 0


def client_run(endpoint, job, answer_s=2.0):
    async def run():
        context = zmq.asyncio.Context()
        client = CommandClient(context, endpoint, answer_s)
        await client.start()
        try:
            return await job(client)
        finally:
            await client.stop()
            context.term()

    return asyncio.run(run())


def test_client_gets_the_event_and_a_repeat_the_same(contacts):
    async def job(client):
        first = await client.ask("note", {"by": "me", "note": "x"}, "key:1")
        both = await asyncio.gather(*(client.ask("note", {"by": "me", "note": "y"}, "key:2") for _ in range(2)))
        return first, await client.ask("note", {"by": "me", "note": "x"}, "key:1"), both

    first, again, both = client_run(contacts.endpoints["commands"], job, 20.0)
    assert (first.status, first.body["text"]) == (201, "x")
    assert again == first
    assert both[0] == both[1]
    assert len(contacts.wait_for("note", 2)) == 2


def test_client_is_told_when_nobody_answers_and_finds_contacts_when_it_is_back(contacts):
    contacts.stop()

    async def job(client):
        with pytest.raises(Problem) as away:
            await client.ask("note", {"by": "me", "note": "x"}, "key:9")
        await asyncio.to_thread(contacts.start)
        client._answer_s = 20.0
        return away.value, await client.ask("note", {"by": "me", "note": "x"}, "key:9")

    away, answer = client_run(contacts.endpoints["commands"], job, 0.2)
    assert away.status == 503
    assert "Idempotency-Key" in away.detail
    assert answer.status == 201


def test_client_refuses_more_than_it_can_wait_for(contacts):
    contacts.stop()

    async def job(client):
        asked = [client.ask("note", {"by": "me", "note": "x"}) for _ in range(300)]
        return await asyncio.gather(*asked, return_exceptions=True)

    refused = client_run(contacts.endpoints["commands"], job, 0.3)
    assert sum("too many" in answer.detail for answer in refused) == 300 - 256
