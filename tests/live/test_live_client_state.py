"""One live client without its connection."""

from live_rig import map_message

from soundrose.serve.live_client import Closing, LiveClient, MapCounter
from soundrose.serve.live_frames import MapFrames
from soundrose.serve.live_request import LiveRequest


def asked(client, *topics, since=None, bands=()):
    client.apply(LiveRequest(frozenset(topics), bands, since=since))


def drained(client):
    frames = MapFrames()
    taken = []
    while (frame := client.take(lambda found, reduction, n: frames.frame(found.message, reduction, n))) is not None:
        taken.append(frame)
    return taken


def test_maps_left_out_are_counted_on_over_a_new_request():
    client, counter, counts = LiveClient(lambda: None), MapCounter(), []
    for seq in range(8):
        if seq in (0, 5):
            asked(client, "map", bands=("main",))
        client.offer_map("main", counter.count(map_message(seq)))
        if seq in (0, 7):
            client.take(lambda _found, _reduction, skipped: counts.append(skipped) or b"")
    assert counts == [0, 6]


def test_waiting_events_stay_over_a_new_request_and_go_where_it_says_since():
    for since, expected in ((None, ["1"]), ("place", [])):
        client = LiveClient(lambda: None)
        asked(client, "alert", "track")
        client.offer_event("alert", "1")
        client.offer_event("track", "2")
        client.offer_event("note", "not asked for")
        asked(client, "alert", since=since)
        assert drained(client) == expected


def test_answers_stay_whatever_is_asked_for_next():
    client = LiveClient(lambda: None)
    client.answer("hello")
    asked(client, "alert", since="place")
    assert drained(client) == ["hello"]


def test_last_bad_request_is_answered_before_the_end():
    client = LiveClient(lambda: None)
    assert [client.refuse(str(n)) for n in range(10)] == [True] * 9 + [False]
    assert drained(client) == [*(str(n) for n in range(10)), Closing(1008, "10 bad requests")]
