"""The shared record: never torn, whatever the writer was doing when it died."""

import os

import pytest

from soundrose.feed.record import RECORD_BYTES, SharedRecord, make_record_file


@pytest.fixture
def descriptor():
    fd = make_record_file()
    yield fd
    os.close(fd)


def test_new_record_is_empty(descriptor):
    assert SharedRecord(descriptor).read() == b""


def test_reader_sees_the_newest_value_and_a_second_writer_goes_on(descriptor):
    first, reader = SharedRecord(descriptor), SharedRecord(descriptor)
    for number in range(5):
        first.write(b"value %d" % number)
        assert reader.read() == b"value %d" % number
    SharedRecord(descriptor).write(b"after a restart")
    assert reader.read() == b"after a restart"


def test_value_torn_at_any_byte_leaves_the_one_before(descriptor):
    record = SharedRecord(descriptor)
    record.write(b"a" * 300)
    before = os.pread(descriptor, RECORD_BYTES, 0)
    record.write(b"b" * 300)
    after = os.pread(descriptor, RECORD_BYTES, 0)
    changed = [i for i in range(RECORD_BYTES) if before[i] != after[i]]
    for cut in range(0, len(changed), 7):
        torn = bytearray(before)
        for i in changed[cut:]:  # the head is written last, so it is what is missing or half there
            torn[i] = after[i]
        os.pwrite(descriptor, bytes(torn), 0)
        assert SharedRecord(descriptor).read() in (b"a" * 300, b"b" * 300)
        half = bytearray(after)
        for i in changed[cut:]:
            half[i] = before[i]
        os.pwrite(descriptor, bytes(half), 0)
        assert SharedRecord(descriptor).read() in (b"a" * 300, b"b" * 300)


def test_reader_held_up_between_the_slots_looks_again(descriptor, monkeypatch):
    """The writer is at the one slot when it is read, and at the other when that is: neither reads whole."""
    writer, reader = SharedRecord(descriptor), SharedRecord(descriptor)
    writer.write(b"value")
    whole, calls = SharedRecord._slot, []

    def slot(self, which):
        calls.append(which)
        return (0, b"") if len(calls) <= 2 else whole(self, which)

    monkeypatch.setattr(SharedRecord, "_slot", slot)
    assert reader.read() == b"value"


def test_value_longer_than_a_slot_is_refused(descriptor):
    with pytest.raises(ValueError, match="at most"):
        SharedRecord(descriptor).write(bytes(RECORD_BYTES))
