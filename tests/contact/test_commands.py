"""Commands as bytes: they come back, and anything else is told; each is done once."""

import time
from contextlib import suppress

import msgpack
import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.contact.commands import (
    COMMAND_BYTES,
    Answer,
    Command,
    decode_answer,
    decode_command,
    encode_answer,
    encode_command,
    note_payload,
)
from soundrose.contact.process import CommandDesk
from soundrose.errors import WireError
from soundrose.settings_types import StoreSettings
from soundrose.store.event_log import EventLog

plain = st.dictionaries(
    st.text(max_size=8), st.one_of(st.none(), st.booleans(), st.integers(-99, 99), st.text(max_size=9))
)
ids = st.text(min_size=1, max_size=128)


@given(ids, st.text(max_size=20), plain)
def test_command_comes_back(name_id, name, arguments):
    command = Command(name_id, name, arguments)
    assert decode_command(encode_command(command)) == command


@given(ids, st.integers(200, 599), plain)
def test_answer_comes_back(name_id, status, body):
    answer = Answer(name_id, status, body)
    assert decode_answer(encode_answer(answer)) == answer


@given(st.binary(max_size=200))
def test_any_bytes_give_a_command_or_a_wire_error(data):
    for decode in (decode_command, decode_answer):
        with suppress(WireError):
            assert isinstance(decode(data), Command | Answer)


@pytest.mark.parametrize(
    ("change", "word"),
    [({"v": 2}, "`v` 1"), ({"id": ""}, "`id`"), ({"id": "x" * 129}, "`id`"), ({"id": 7}, "`id`"),
     ({"command": 1}, "`command`"), ({"arguments": []}, "`command`")],
)  # fmt: skip
def test_wrong_commands_say_what_was_wrong(change, word):
    whole = {"v": 1, "id": "a", "command": "note", "arguments": {}}
    with pytest.raises(WireError, match=word):
        decode_command(msgpack.packb({**whole, **change}))


@pytest.mark.parametrize("change", [{"status": 100}, {"status": "ok"}, {"body": None}])
def test_wrong_answers_say_what_was_wrong(change):
    with pytest.raises(WireError, match="`status`"):
        decode_answer(msgpack.packb({"v": 1, "id": "a", "status": 201, "body": {}, **change}))


def test_size_is_bounded_before_anything_is_read():
    with pytest.raises(WireError, match="bytes"):
        decode_command(bytes(COMMAND_BYTES + 1))


def test_a_note_says_who_and_what():
    assert note_payload({"by": "me", "note": "line\nof\ttext µ"}) == {"by": "me", "text": "line\nof\ttext µ"}


@pytest.mark.parametrize(
    ("arguments", "word"),
    [({"note": "x"}, "`by`"), ({"by": "", "note": "x"}, "`by`"), ({"by": "x" * 65, "note": "x"}, "`by`"),
     ({"by": 1, "note": "x"}, "`by`"), ({"by": "\ud800", "note": "x"}, "`by`"), ({"by": "me"}, "`note`"),
     ({"by": "me", "note": " \n"}, "`note`"), ({"by": "me", "note": "x" * 2001}, "`note`"),
     ({"by": "me", "note": "bell \a"}, "`note`")],
)  # fmt: skip
def test_a_note_that_is_none_is_told(arguments, word):
    with pytest.raises(WireError, match=word):
        note_payload(arguments)


@pytest.fixture
def log(tmp_path):
    found = EventLog(StoreSettings(str(tmp_path)))
    yield found
    found.close()


def answers(desk):
    until = time.monotonic() + 10
    while not (ready := desk.written()):
        assert time.monotonic() < until
    return ready


def note(name_id, text="x"):
    return Command(name_id, "note", {"by": "me", "note": text})


def test_a_note_is_answered_with_its_event_when_it_is_on_the_disk(log):
    desk = CommandDesk(log)
    assert desk.take(b"1", note("a"), 77) is None
    assert desk.waiting
    [(askers, answer)] = answers(desk)
    assert (askers, answer.id, answer.status) == ([b"1"], "a", 201)
    assert (answer.body["kind"], answer.body["t"], answer.body["text"]) == ("note", 77, "x")
    assert not desk.waiting


def test_an_id_repeated_gets_the_first_answer(log):
    desk = CommandDesk(log)
    desk.take(b"1", note("a"), 1)
    assert desk.take(b"2", note("a", "other"), 2) is None
    assert desk.take(b"1", note("a"), 3) is None
    [(askers, answer)] = answers(desk)
    assert askers == [b"1", b"2"]
    assert desk.take(b"3", note("a", "third"), 4) == answer
    log.close()  # the figures follow the answer
    assert log.facts()["written"] == 1


def test_an_id_repeated_after_a_restart_gets_the_first_answer(tmp_path):
    log = EventLog(StoreSettings(str(tmp_path)))
    desk = CommandDesk(log)
    desk.take(b"1", note("a"), 1)
    [(_, answer)] = answers(desk)
    log.close()
    log = EventLog(StoreSettings(str(tmp_path)))
    assert CommandDesk(log).take(b"9", note("a"), 5) == answer
    log.close()


def test_what_cannot_be_done_is_answered_at_once(log):
    desk = CommandDesk(log)
    assert desk.take(b"1", Command("a", "dance", {}), 1).status == 404
    assert desk.take(b"1", Command("b", "note", {}), 1).status == 422
    assert desk.take(b"1", note("b"), 1) is None  # a refusal is not remembered: mended, it is done


def test_memory_of_answers_and_of_those_who_wait_is_bounded(tmp_path):
    log = EventLog(StoreSettings(str(tmp_path)), queue_events=300)
    desk = CommandDesk(log)
    log.close()  # takes nothing any more
    assert desk.take(b"1", note("a"), 1).status == 503
    for n in range(1500):
        desk._remember(Answer(str(n), 201, {}))
    assert len(desk._done) == 1000
