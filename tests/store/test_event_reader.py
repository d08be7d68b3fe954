"""Reading by cursor: whatever is appended, deleted and reopened in between, nothing twice and nothing missing."""

import json
import shutil
import tempfile
import threading
from pathlib import Path

import pytest
from hypothesis import HealthCheck, settings
from hypothesis import strategies as st
from hypothesis.stateful import RuleBasedStateMachine, invariant, rule
from store_rig import everything, flush, opened

from soundrose.errors import UsageError
from soundrose.store.cursors import Cursor, CursorGone
from soundrose.store.event_log import Entry
from soundrose.store.event_reader import MOST_ITEMS, EventReader, NoLog
from soundrose.store.log_file import open_log_file
from soundrose.store.schema import FILE_NAME, connect_writer

KINDS = ["health", "status", "note", "detection"]


class LogFollowers(RuleBasedStateMachine):
    """A log that is written, cut by retention and reopened, and three who follow it: all kinds, two, one rare."""

    def __init__(self):
        super().__init__()
        self.folder = Path(tempfile.mkdtemp(prefix="events-"))
        self.reader = EventReader(self.folder)
        self.log = None
        self.start()
        self.model = [(1, "status", None)]  # (row, kind, n), the whole history
        self.floor = 0
        self.wanted = [None, ["note", "health"], ["detection"]]
        self.places: list[Cursor | None] = [None, None, None]
        self.seen_row = [0, 0, 0]
        self.n = 0

    def start(self):
        self.log = open_log_file(self.folder / FILE_NAME, connect_writer, 0)

    @rule(kinds=st.lists(st.sampled_from(KINDS), max_size=12))
    def append(self, kinds):
        events = []
        for kind in kinds:
            self.n += 1
            events.append((kind, self.n * 10, self.n, json.dumps({"n": self.n})))
            self.model.append((self.model[-1][0] + 1, kind, self.n))
        self.log.write([Entry(tuple(events))], 0, 0)

    @rule()
    def reopen_the_log(self):
        self.log.close()
        self.start()

    @rule()
    def reopen_the_reader(self):
        self.reader.close()
        self.reader = EventReader(self.folder)

    @rule(rows=st.integers(0, 8))
    def delete_the_oldest(self, rows):
        """Age: `recorded` of a row is its n here, and that of the first row 0."""
        self.floor = min(self.floor + rows, self.model[-1][0])
        self.log.tidy(self.floor, 10**12)

    @rule(who=st.integers(0, 2), limit=st.integers(1, 7))
    def follow(self, who, limit):
        place, kinds = self.places[who], self.wanted[who]
        if place is not None and place.row < self.floor:
            with pytest.raises(CursorGone) as gone:
                self.reader.since(place, kinds, limit)
            assert gone.value.why == "retention"
            self.places[who] = None  # begins anew with the oldest
            return
        items, after = self.reader.since(place, kinds, limit)
        begun = self.floor if place is None else place.row
        due = [event for event in self.model if event[0] > begun and (kinds is None or event[1] in kinds)]
        assert [item.get("n") for item in items] == [event[2] for event in due[:limit]]
        assert after.row == (due[limit - 1][0] if len(due) >= limit else self.model[-1][0])
        assert all(str(Cursor(after.log, event[0])) == item["cursor"] for item, event in zip(items, due, strict=False))
        self.places[who] = after

    @invariant()
    def an_items_own_cursor_goes_on_behind_it(self):
        items, _ = self.reader.since(None, None, 3)
        if items:
            following, _ = self.reader.since(Cursor.parse(items[0]["cursor"]), None, 2)
            assert following == items[1:3]

    def teardown(self):
        self.reader.close()
        self.log.close()
        shutil.rmtree(self.folder)


LogFollowers.TestCase.settings = settings(
    max_examples=25, stateful_step_count=25, deadline=None, suppress_health_check=list(HealthCheck)
)
TestLogFollowers = LogFollowers.TestCase


@pytest.fixture
def reader(tmp_path):
    found = EventReader(tmp_path)
    yield found
    found.close()


def test_following_while_it_is_written_gives_everything_once(tmp_path, reader):
    got, place = [], None
    with opened(tmp_path) as log:
        done = threading.Event()

        def write():
            for n in range(3000):
                log.append("note", n, {"n": n})
                if n % 50 == 0:
                    log.append_all([], urgent=True)
            flush(log)
            done.set()

        writer = threading.Thread(target=write)
        writer.start()
        ended = False
        while True:
            items, place = reader.since(place, None, 70)
            got += items
            if ended and not items:
                break
            ended = done.is_set()
        writer.join()
    assert [item["n"] for item in got[1:]] == list(range(3000))


def test_no_log_yet_is_told_and_found_when_it_comes(tmp_path, reader):
    for call in (reader.newest, reader.version, lambda: reader.since(None)):
        with pytest.raises(NoLog, match="no event log"):
            call()
    with opened(tmp_path):
        assert len(reader.since(None)[0]) == 1


def test_an_unfinished_file_is_no_log_yet(tmp_path, reader):
    (tmp_path / "events.sqlite").touch()
    with pytest.raises(NoLog, match="not there yet"):
        reader.since(None)


def test_reading_goes_on_while_no_writer_is_there(tmp_path, reader):
    with opened(tmp_path) as log:
        log.append("note", 1, {"n": 1})
    assert [item.get("n") for item in reader.since(None)[0]] == [None, 1]
    assert reader.newest().row == 2


def test_an_empty_answer_leads_to_what_comes_next(tmp_path, reader):
    with opened(tmp_path) as log:
        nothing, place = reader.since(None, ["note"])
        assert nothing == []
        log.append("health", 1, {"n": 1})
        log.append("note", 1, {"n": 2})
        flush(log)
        assert [item["n"] for item in reader.since(place, ["note"])[0]] == [2]


def test_cursors_that_cannot_be_followed_say_why(tmp_path, reader):
    with opened(tmp_path):
        newest = reader.newest()
        for place, why in ((Cursor("0" * 16, 0), "another log"), (Cursor(newest.log, newest.row + 1), "ahead")):
            with pytest.raises(CursorGone) as gone:
                reader.since(place)
            assert gone.value.why == why


def test_a_time_begins_with_the_first_event_of_its_kinds_not_before_it(tmp_path, reader):
    with opened(tmp_path) as log:
        for n, (kind, t_ns) in enumerate([("note", 10), ("health", 90), ("note", 50), ("note", 20), ("health", 95)]):
            log.append(kind, t_ns, {"n": n})
        flush(log)

        def asked(t_ns, kinds):
            return [item["n"] for item in reader.since(t_ns, kinds)[0]]

        assert asked(50, ["note"]) == [2, 3]  # what follows in the log is given whatever its time
        assert asked(51, ["note"]) == []
        assert asked(50, ["note", "health"]) == [1, 2, 3, 4]
        assert asked(91, ["health"]) == [4]
        assert asked(2**62, None) == []
        _, place = reader.since(2**62, None)
        log.append("note", 0, {"n": 9})
        flush(log)
        assert [item["n"] for item in reader.since(place)[0]] == [9]
        assert len(reader.since(-(2**62), None)[0]) == 7


def test_reading_can_end_at_a_cursor(tmp_path, reader):
    with opened(tmp_path) as log:
        for n in range(10):
            log.append("note", n, {"n": n})
        flush(log)
        end = Cursor(reader.newest().log, 6)
        items, place = reader.since(None, None, 100, until=end)
        assert [item.get("n") for item in items] == [None, 0, 1, 2, 3, 4]
        assert place == end
        assert reader.since(place, None, 100, until=end) == ([], end)
        behind = Cursor(end.log, 8)
        assert reader.since(behind, None, 100, until=end) == ([], behind)  # never back


@pytest.mark.parametrize("limit", [0, -1, MOST_ITEMS + 1])
def test_limit_has_bounds(reader, limit):
    with pytest.raises(UsageError, match="limit"):
        reader.since(None, None, limit)


def test_version_differs_after_every_commit(tmp_path, reader):
    with opened(tmp_path) as log:
        before = reader.version()
        assert reader.version() == before
        log.append("note", 1, {})
        flush(log)
        assert reader.version() != before


def test_pages_of_any_size_give_the_same(tmp_path):
    with opened(tmp_path) as log:
        for n in range(100):
            log.append(KINDS[n % 4], n, {"n": n})
        flush(log)
        whole = everything(tmp_path)
        for page in (1, 3, 50, 101):
            assert everything(tmp_path, None, page) == whole
            assert everything(tmp_path, ["note", "detection"], page) == [i for i in whole if i["kind"] in KINDS[2:]]
