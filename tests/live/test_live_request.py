"""Requests of live clients: what is taken, what is refused and why."""

import contextlib
import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from soundrose.errors import UsageError
from soundrose.serve.live_request import LiveRequest, Reduction, parse_request

BANDS = {"main": (50.0, 2000.0), "low": (10.0, 500.0)}

REFUSED = [
    ("", "not JSON"),
    ("{", "not JSON"),
    ("[]", "must be an object"),
    ("null", "must be an object"),
    ('"map"', "must be an object"),
    ("[" * 20_000, "not JSON"),
    ('{"subscribe": ["map"], "map": {"f_min": NaN}}', "NaN is no JSON"),
    ('{"subscribe": ["map"], "map": {"f_min": 1e999}}', "map.f_min is Infinity"),
    ("{}", "subscribe is missing"),
    ('{"subscribe": null}', "subscribe is null"),
    ('{"subscribe": "map"}', 'subscribe is "map"'),
    ('{"subscribe": ["maps"]}', "a list of words out of map, detection"),
    ('{"subscribe": [1]}', "subscribe is [1]"),
    ('{"subscribe": [["map"]]}', "a list of words"),
    ('{"subscribe": ["map"], "map": []}', "map is []; it must be an object"),
    ('{"subscribe": ["map"], "map": {"bands": ["other"]}}', "a list of words out of main, low"),
    ('{"subscribe": ["map"], "map": {"bands": "main"}}', "map.bands"),
    ('{"subscribe": ["map"], "map": {"bins": 0}}', "map.bins is 0"),
    ('{"subscribe": ["map"], "map": {"bins": 1.5}}', "map.bins is 1.5"),
    ('{"subscribe": ["map"], "map": {"bins": true}}', "map.bins is true"),
    ('{"subscribe": ["map"], "map": {"beams": -1}}', "map.beams is -1"),
    ('{"subscribe": ["map"], "map": {"beams": 1000001}}', "map.beams is 1000001"),
    ('{"subscribe": ["map"], "map": {"f_min": -1}}', "map.f_min is -1"),
    ('{"subscribe": ["map"], "map": {"f_min": "50"}}', "map.f_min"),
    ('{"subscribe": ["map"], "map": {"f_min": 900, "f_max": 800}}', "must not be above map.f_max"),
    ('{"subscribe": ["map"], "map": {"f_min": 600}}', "band low has 10 to 500 Hz"),
    ('{"subscribe": ["map"], "map": {"f_max": 20, "bands": ["main"]}}', "band main has 50 to 2000 Hz"),
    ('{"subscribe": ["map"], "map": {"rate_hz": 0}}', "map.rate_hz is 0"),
    ('{"subscribe": ["map"], "map": {"rate_hz": 101}}', "map.rate_hz is 101"),
    ('{"subscribe": ["map"], "map": {"rate_hz": true}}', "map.rate_hz is true"),
    ('{"subscribe": ["map"], "map": {"encoding": "f8"}}', "one of f4, u1"),
    ('{"subscribe": ["map"], "map": {"encoding": 4}}', "one of f4, u1"),
    ('{"subscribe": ["map"], "map": {"pick": "median"}}', "one of mean, max"),
    ('{"subscribe": ["alert"], "since": 5}', "since is 5"),
    ('{"subscribe": ["alert"], "since": ""}', "since is"),
]  # fmt: skip


@pytest.mark.parametrize(("text", "telling"), REFUSED, ids=range(len(REFUSED)))
def test_mistake_is_named(text, telling):
    with pytest.raises(UsageError) as error:
        parse_request(text, BANDS)
    assert telling in str(error.value)
    assert len(str(error.value)) < 500


def test_every_mistake_is_named_at_once():
    text = '{"subscribe": ["x"], "map": {"bins": 0, "beams": "7", "encoding": "f8", "rate_hz": -1}, "since": 1}'
    with pytest.raises(UsageError) as error:
        parse_request(text, BANDS)
    assert str(error.value).count(";") >= 6
    for name in ("subscribe", "map.bins", "map.beams", "map.encoding", "map.rate_hz", "since"):
        assert f"{name} is" in str(error.value)


def test_whole_request_is_read():
    request = parse_request(
        json.dumps({
            "subscribe": ["map", "alert", "health"], "since": "0" * 16 + "-7", "something": "new",
            "map": {"bands": ["low"], "bins": 512, "beams": 145, "f_min": 20, "f_max": 400.5, "rate_hz": 5,
                    "encoding": "u1", "pick": "max", "later": 1},
        }),
        BANDS,
    )  # fmt: skip
    assert request == LiveRequest(
        frozenset({"map", "alert", "health"}),
        ("low",),
        Reduction(512, 145, 20.0, 400.5, "max", "u1"),
        5.0,
        "0" * 16 + "-7",
    )
    assert request.kinds == ("alert", "health")


def test_what_is_left_out_means_every_map_of_every_band_as_it_is():
    assert parse_request('{"subscribe": ["map"]}', BANDS) == LiveRequest(frozenset({"map"}), ("main", "low"))


def test_without_map_no_band_is_asked_for():
    assert parse_request('{"subscribe": ["status"], "map": {"bins": 5}}', BANDS).bands == ()


JSON = st.recursive(
    st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20),
    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(st.text(max_size=8), inner, max_size=4),
    max_leaves=12,
)
KEYS = st.sampled_from(["bands", "bins", "beams", "f_min", "f_max", "rate_hz", "encoding", "pick", "x"])


@given(
    st.fixed_dictionaries(
        {},
        optional={
            "subscribe": JSON | st.lists(st.sampled_from(["map", "alert", "status"])),
            "map": JSON | st.dictionaries(KEYS, JSON, max_size=5),
            "since": JSON,
        },
    )
)
def test_any_object_is_read_or_refused_in_words(given_object):
    text = json.dumps(given_object)
    try:
        request = parse_request(text, BANDS)
    except UsageError:
        pass
    else:
        assert request.topics <= {"map", "alert", "status"}
        assert set(request.bands) <= set(BANDS)


@given(st.text(max_size=200))
def test_any_text_is_read_or_refused_in_words(text):
    with contextlib.suppress(UsageError):  # anything else is a fault
        parse_request(text, BANDS)
