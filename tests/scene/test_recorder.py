"""A scene as messages: what the feed of a service makes of them."""

import msgpack
import numpy as np
import pytest
from small_scene import RATE, click, contact, small_scene

from soundrose.feed.decoding import decode
from soundrose.feed.hop import Navigation, Positions, Pulse
from soundrose.feed.messages import Samples
from soundrose.feed.wire import Expected
from soundrose.scene.recorder import Recorder, latitude_longitude

START = 1_800_000_000_000_000_000


def decoded(scene, seconds=2.0, block=800):
    expected = Expected(scene.array.id, scene.array.channels, scene.rate_hz)
    recorder = Recorder(scene, "r", START, block, round(seconds * scene.rate_hz))
    return [(sent, decode(sent.parts, expected)) for sent in recorder.messages()]


def of(kind, messages):
    return [message for _, message in messages if isinstance(message, kind)]


def test_samples_are_whole_and_in_order_and_the_run_ends():
    messages = decoded(small_scene(hum={"tones": [[50.0, 120.0]]}))
    samples = of(Samples, messages)
    assert [s.first for s in samples] == list(range(0, 2 * RATE, 800))
    assert sum(s.samples for s in samples) == 2 * RATE
    assert samples[5].t_ns == START + 500_000_000
    assert msgpack.unpackb(messages[-1][0].parts[0])["kind"] == "end"


def test_bytes_do_not_depend_on_the_block():
    scene = small_scene(hum={"tones": [[50.0, 120.0]]}, ambient={"enabled": True}, contacts=[contact(level_db=120.0)])
    whole = {}
    for block in (800, 1111):
        rows = [np.frombuffer(s.data, "<f4").reshape(8, -1) for s in of(Samples, decoded(scene, block=block))]
        whole[block] = np.concatenate(rows, axis=1)
    assert np.array_equal(whole[800], whole[1111])


def test_a_gap_leaves_out_its_samples_and_no_others():
    scene = small_scene(
        gaps=[{"at_s": at, "length_s": length} for at, length in ((0.51, 0.3), (0.55, 0.01), (0.7, 0.25))]
    )
    samples = of(Samples, decoded(scene))
    taken = np.concatenate([np.arange(s.first, s.first + s.samples) for s in samples])
    away = np.setdiff1d(np.arange(2 * RATE), taken)
    assert len(taken) == len(set(taken))
    assert (away[0], away[-1] + 1, len(away)) == (round(0.51 * RATE), round(0.95 * RATE), round(0.44 * RATE))


def test_times_follow_the_true_clock_where_the_converter_drifts():
    samples = of(Samples, decoded(small_scene(clock={"drift_ppm": 100.0})))
    last = samples[-1]
    assert last.t_ns == START + round(last.first / (RATE * 1.0001) * 1e9)


def test_navigation_says_where_the_array_is_within_its_noise():
    scene = small_scene(
        own={"latitude_deg": 60.0, "longitude_deg": 3.0, "heading_deg": 90.0, "speed_m_s": 2.0, "layback_m": 100.0},
        navigation={"every_s": 0.05, "heading_sigma_deg": 1.5},
    )
    told = of(Navigation, decoded(scene, 10.0))
    assert len(told) == 200
    assert [n.t_ns for n in told[:3]] == [START, START + 50_000_000, START + 100_000_000]
    headings = np.array([n.values["heading_deg"] for n in told])
    assert headings.mean() == pytest.approx(90.0, abs=0.4)
    assert headings.std() == pytest.approx(1.5, rel=0.2)
    last = told[-1].values
    east_m = (last["longitude_deg"] - 3.0) * np.deg2rad(1) * 6_371_000 * 0.5
    assert east_m == pytest.approx(-100 + 2 * 9.95, abs=0.01)
    assert (last["latitude_deg"], last["depth_m"], last["speed_m_s"]) == pytest.approx((60.0, 20.0, 2.0))
    assert last["course_deg"] == pytest.approx(90.0)


def test_a_minute_of_latitude_is_a_sea_mile():
    latitude, longitude = latitude_longitude(
        small_scene(own={"latitude_deg": 60.0, "longitude_deg": 179.99}), 1852.0, 1852.0
    )
    assert (latitude - 60.0) * 60 == pytest.approx(1.0, rel=2e-3)
    assert -180 <= longitude < -179.9  # across the date line


def test_the_shape_of_the_line_is_told_when_asked_for():
    told = of(Positions, decoded(small_scene(own={"sag_m": 1.0}, navigation={"positions_every_s": 1.0})))
    assert len(told) == 2
    assert np.ptp(told[0].positions_m[:, 2]) == pytest.approx(1.0 * (1 - (0.25 / 1.75) ** 2))


def test_own_pulses_are_told_at_the_time_they_are_given_off_and_others_are_not():
    sources = [
        {"name": "gun", "kind": "gun", "level_db": 180.0, "first_s": 0.25, "interval_s": 0.5, "announce": True},
        {"name": "sounder", "kind": "sounder", "level_db": 180.0, "frequency_hz": 3000.0, "interval_s": 0.5},
    ]  # fmt: skip
    pulses = of(Pulse, decoded(small_scene(own={"sources": sources}, contacts=[click()])))
    assert [(p.source, p.t_ns - START) for p in pulses] == [("gun", 250_000_000 + k * 500_000_000) for k in range(4)]
    assert pulses[0].length_s == pytest.approx(0.35)


def test_notes_come_before_the_samples_of_their_time():
    messages = decoded(small_scene(navigation={"every_s": 0.5}))
    for i, (_, message) in enumerate(messages):
        if isinstance(message, Navigation):
            after = next(m for _, m in messages[i:] if isinstance(m, Samples))
            assert after.t_ns <= message.t_ns < after.t_ns + 100_000_000
