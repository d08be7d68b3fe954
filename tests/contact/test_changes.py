"""Changes as events: what became different is logged once, a restart of the watch logs nothing that is not new."""

import json
from copy import deepcopy

import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.contact.changes import ChangeWatch

STATES = ["good", "dead", "clipped", "intermittent", "not judged", "excluded"]


def health(*states, t=1000, array="aft"):
    channels = [
        {"i": i, "state": state, "level_db": 90.0 + i, "why": None if state == "good" else f"is {state}"}
        for i, state in enumerate(states)
    ]
    return {"array": array, "t": t, "used": 0, "channels": channels}


def process(name, state="up", pid=10, restarts=0, why=None):
    return {"name": name, "state": state, "pid": pid, "restarts": restarts, "since": 1, "why": why}


def status(*processes, start=1, state="waiting", run=None, gaps=0, lost=0, restarts=0, array="aft"):
    return {
        "array": array, "service_start": start, "state": state, "run": run, "gaps": gaps, "lost_samples": lost,
        "restarts": restarts, "processes": list(processes),
    }  # fmt: skip


def payloads(events):
    return [dict(event.payload) for event in events]


def told(watch, message, host_ns=5):
    return payloads(watch.push("status", message, host_ns))


def begun(*processes, **more):
    """A watch that has seen a service start."""
    watch = ChangeWatch()
    watch.push("status", status(*processes, **more), 1)
    return watch


def test_a_hydrophone_that_changes_state_is_logged_once_at_feed_time():
    watch = ChangeWatch()
    assert watch.push("health", health("good", "good"), 5) == []
    events = watch.push("health", health("good", "dead", t=2000), 6)
    assert payloads(events) == [{"channel": 1, "from": "good", "to": "dead", "why": "is dead", "level_db": 91.0}]
    assert (events[0].kind, events[0].t_ns) == ("health", 2000)
    assert watch.push("health", health("good", "dead", t=3000), 7) == []
    assert payloads(watch.push("health", health("good", "good", t=4000), 8))[0]["from"] == "dead"


def test_first_judgement_is_news_unless_it_is_good():
    events = ChangeWatch().push("health", health("good", "excluded", "not judged"), 5)
    assert payloads(events) == [{"channel": 1, "from": None, "to": "excluded", "why": "is excluded", "level_db": 91.0}]


def test_not_judged_is_no_news_and_forgets_nothing():
    watch = ChangeWatch()
    watch.push("health", health("dead"), 1)
    assert watch.push("health", health("not judged"), 2) == []
    assert watch.push("health", health("dead"), 3) == []
    assert payloads(watch.push("health", health("good"), 4))[0]["from"] == "dead"


@given(st.lists(st.lists(st.sampled_from(STATES), min_size=3, max_size=3), max_size=12), st.data())
def test_a_restart_of_the_watch_changes_no_event(seconds, data):
    whole, cut = ChangeWatch(), ChangeWatch()
    for second, states in enumerate(seconds):
        if data.draw(st.booleans()):
            cut = ChangeWatch(json.loads(json.dumps(cut.known)))
        message = health(*states, t=second)
        assert cut.push("health", message, 1) == whole.push("health", message, 1)
    assert cut.known == whole.known


@given(st.lists(st.lists(st.sampled_from(STATES), min_size=2, max_size=2), max_size=12))
def test_from_of_a_change_is_to_of_the_one_before(seconds):
    watch, last = ChangeWatch(), {}
    for states in seconds:
        for event in payloads(watch.push("health", health(*states), 1)):
            assert event["from"] == last.get(event["channel"], "good" if event["from"] else None)
            assert event["from"] != event["to"]
            last[event["channel"]] = event["to"]


def test_a_service_that_starts_and_its_processes_are_logged():
    watch = ChangeWatch()
    assert told(watch, status(process("ingest", "starting"), process("proxy", pid=7))) == [
        {"what": "service-started", "service_start": 1, "previous": None},
        {"what": "process-up", "name": "proxy", "pid": 7, "restarts": 0},
    ]
    assert told(watch, status(process("ingest"), process("proxy", pid=7))) == [
        {"what": "process-up", "name": "ingest", "pid": 10, "restarts": 0}
    ]
    assert told(watch, status(process("ingest"), process("proxy", pid=7))) == []


def test_status_events_have_host_time():
    events = ChangeWatch().push("status", status(), 123)
    assert [(event.kind, event.t_ns) for event in events] == [("status", 123)]


@pytest.mark.parametrize(("orderly", "previous"), [(True, "ended"), (False, "not ended in order")])
def test_the_next_start_says_how_the_last_ended(orderly, previous):
    watch = begun()
    if orderly:
        assert payloads(watch.end(9)) == [{"what": "service-ended", "service_start": 1}]
    again = ChangeWatch(watch.known)
    assert told(again, status(start=2)) == [{"what": "service-started", "service_start": 2, "previous": previous}]


def test_an_end_before_any_status_says_nothing():
    assert ChangeWatch().end(1) == []


def test_a_process_that_ends_and_comes_back_is_logged_with_its_reason():
    watch = begun(process("ingest"))
    why = "ended by signal SIGKILL"
    assert told(watch, status(process("ingest", "down", None, 0, why))) == [
        {"what": "process-down", "name": "ingest", "why": why}
    ]
    assert told(watch, status(process("ingest", "starting", 11, 1, why))) == []
    assert told(watch, status(process("ingest", "up", 11, 1, why))) == [
        {"what": "process-up", "name": "ingest", "pid": 11, "restarts": 1}
    ]


def test_a_restart_between_two_messages_is_seen_by_its_count_and_pid():
    watch = begun(process("ingest"))
    assert [event["what"] for event in told(watch, status(process("ingest", pid=11, restarts=1, why="x")))] == [
        "process-down", "process-up",
    ]  # fmt: skip
    assert [event["what"] for event in told(watch, status(process("ingest", pid=11, restarts=2)))] == [
        "process-down", "process-up",
    ]  # fmt: skip
    assert [event["what"] for event in told(watch, status(process("ingest", pid=12, restarts=2)))] == [
        "process-down", "process-up",
    ]  # fmt: skip


def test_a_process_elsewhere_has_no_pid_and_is_logged_all_the_same():
    watch = begun(process("band:low", "down", None))
    assert [e["what"] for e in told(watch, status(process("band:low", "up", None)))] == ["process-up"]
    assert told(watch, status(process("band:low", "up", None))) == []
    assert [e["what"] for e in told(watch, status(process("band:low", "down", None)))] == ["process-down"]


def test_runs_feed_state_gaps_and_restarts_are_logged():
    watch = begun()
    assert told(watch, status(state="running", run="a")) == [
        {"what": "run-begun", "run": "a"},
        {"what": "feed", "from": "waiting", "to": "running"},
    ]
    assert told(watch, status(state="running", run="a", gaps=2, lost=700)) == [
        {"what": "gap", "gaps": 2, "lost_samples": 700, "run": "a"}
    ]
    assert told(watch, status(state="running", run="a", gaps=3, lost=701, restarts=1)) == [
        {"what": "gap", "gaps": 1, "lost_samples": 1, "run": "a"},
        {"what": "run-restarted", "restarts": 1, "run": "a"},
    ]
    assert told(watch, status(state="running", run="b", gaps=3, lost=701, restarts=1)) == [
        {"what": "run-ended", "run": "a"},
        {"what": "run-begun", "run": "b"},
    ]
    assert told(watch, status(state="waiting", gaps=3, lost=701, restarts=1)) == [
        {"what": "run-ended", "run": "b"},
        {"what": "feed", "from": "running", "to": "waiting"},
    ]


def test_counters_of_a_new_service_begin_at_nothing():
    watch = begun(state="running", run="a", gaps=5, lost=50)
    events = told(watch, status(start=2, state="running", run="a", gaps=1, lost=9))
    assert [event["what"] for event in events] == ["service-started", "run-begun", "feed", "gap"]
    assert events[-1]["gaps"] == 1


def test_another_array_begins_with_nothing_known():
    watch = ChangeWatch()
    watch.push("health", health("dead"), 1)
    assert payloads(watch.push("health", health("dead", array="bow"), 1))[0]["from"] is None


def test_other_topics_make_no_events():
    assert ChangeWatch().push("levels", {"array": "aft"}, 1) == []


def test_long_texts_are_cut_to_fit_an_event():
    watch = begun()
    assert len(told(watch, status(state="running", run="r" * 10_000))[0]["run"]) == 500


def test_a_push_changes_nothing_it_was_given():
    message = status(process("ingest"), state="running", run="a")
    before = deepcopy(message)
    known = begun().known
    kept = deepcopy(known)
    ChangeWatch(known).push("status", message, 1)
    assert (message, known) == (before, kept)
