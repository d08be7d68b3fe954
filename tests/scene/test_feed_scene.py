"""`soundrose feed scene` in this process, against a socket that takes what it sends."""

import io
import json
import threading

import msgpack
import pytest
import zmq
from rich.console import Console
from small_scene import raw_scene, small_scene

from soundrose.errors import UsageError
from soundrose.scene.command import SceneOptions, check_fit, feed_scene
from soundrose.scene.scene_file import shipped
from soundrose.scene.sighting import sighting
from soundrose.settings import parse_settings

SCENE = """
name = "small"
[array]
id = "aft"
hydrophones = 4
spacing_m = 0.5
[feed]
rate_hz = 8000.0
type = "i2"
[own]
array_depth_m = 20.0
[navigation]
every_s = 0.5
[[contacts]]
name = "one"
range_m = 500.0
bearing_deg = 60.0
depth_m = 10.0
level_db = 130.0
"""


@pytest.fixture
def service():
    """Address and list of the headers that came, until the end of the run."""
    with zmq.Context() as context, context.socket(zmq.PULL) as socket:
        port = socket.bind_to_random_port("tcp://127.0.0.1")
        came, done = [], threading.Event()

        def take():
            while not done.is_set():
                if socket.poll(50):
                    came.append(msgpack.unpackb(socket.recv_multipart()[0]))

        thread = threading.Thread(target=take)
        thread.start()
        yield f"tcp://127.0.0.1:{port}", came
        done.set()
        thread.join()


def run(path, **options):
    text = io.StringIO()
    status = feed_scene(path, SceneOptions(**options), Console(file=text, width=200))
    return status, text.getvalue()


def test_a_scene_is_sent_with_its_notes_and_its_truth(service, tmp_path):
    address, came = service
    (tmp_path / "s.toml").write_text(SCENE)
    status, text = run(
        tmp_path / "s.toml",
        to=address,
        speed="max",
        seconds=2.0,
        truth=tmp_path / "t.jsonl",
        start="2026-05-04T03:00:00Z",
    )
    assert status == 0, text
    assert "sent 16000 samples (2.0 s) in 40 blocks" in text
    kinds = [header["kind"] for header in came]
    assert (kinds.count("samples"), kinds.count("navigation"), kinds[-1]) == (40, 4, "end")
    truth = [json.loads(line) for line in (tmp_path / "t.jsonl").read_text().splitlines()]
    assert [line["time_s"] for line in truth] == [0.0, 1.0, 2.0]
    assert truth[0]["t"] == came[0]["t"] == 1_777_863_600_000_000_000
    assert truth[1]["contacts"][0]["cone_deg"] == pytest.approx(60.0, abs=0.1)


def test_what_is_wrong_is_told(tmp_path):
    status, text = run(tmp_path / "none.toml")
    assert (status, "none.toml: No such file" in text) == (2, True)
    (tmp_path / "s.toml").write_text(SCENE.replace('"one"', '"hum"'))
    assert run(tmp_path / "s.toml")[0] == 2
    (tmp_path / "s.toml").write_text(SCENE)
    assert "seconds: got -1" in run(tmp_path / "s.toml", seconds=-1.0)[1]
    status, text = run(tmp_path / "s.toml", truth=tmp_path / "no" / "t", seconds=1.0)
    assert (status, "truth: cannot write" in text) == (2, True)


def test_a_service_that_is_not_there_is_told(tmp_path):
    (tmp_path / "s.toml").write_text(SCENE)
    status, text = run(tmp_path / "s.toml", to="tcp://127.0.0.1:9", speed="max", seconds=1.0, timeout_s=0.2)
    assert status == 1
    assert "is the service running" in text


def test_scene_and_settings_must_fit():
    raw = raw_scene()
    plain = {
        "array": raw["array"], "feed": {"rate_hz": 8000.0}, "calibration": raw["calibration"],
        "bands": [{"name": "main", "band_hz": [100.0, 1400.0], "frame": 1024, "beams": 33}],
    }  # fmt: skip
    check_fit(small_scene(), parse_settings(plain))
    other = {
        "array": {"id": "bow", "hydrophones": 8, "spacing_m": 0.6}, "feed": {"rate_hz": 16000.0},
        "calibration": raw["calibration"] | {"gain_db": 3.0},
    }  # fmt: skip
    with pytest.raises(UsageError) as caught:
        check_fit(small_scene(), parse_settings(plain | other))
    for word in ("array.id", "feed.rate_hz", "stand elsewhere", "calibration.gain_db"):
        assert word in str(caught.value)


def test_the_demo_is_found_by_its_name(service):
    address, came = service
    status, text = run(shipped("demo.toml"), to=address, speed="max", seconds=0.1)
    assert status == 0, text
    assert came[-1]["kind"] == "end"


def test_sighting_takes_the_loudest_peak_away_from_own_ship():
    import numpy as np

    level = np.full((4, 5), 60.0, np.float32)
    level[0], level[1], level[2], level[3, 0] = 90.0, 66.0, 70.0, 100.0  # own ship, another, and a low tone
    truth = {"contacts": [{"name": "b", "cone_deg": 88.0}, {"name": "a", "cone_deg": 1.0}]}
    seen = sighting(level, np.array([0.0, 45.0, 90.0, 135.0]), np.arange(1.0, 6.0), truth)
    assert (seen.cone_deg, seen.level_db) == (90.0, pytest.approx(70.0, abs=1e-5))
    assert seen.text == "loudest away from own ship: 90.0°; truly there: a 1.0°, b 88.0°"
