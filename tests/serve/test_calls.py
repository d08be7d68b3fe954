"""The other calls: topics, readiness, the array, pages; methods; errors as problems."""

import math
import re
from html.parser import HTMLParser

import numpy as np
import pytest
from web_rig import (
    BEAMS,
    CHANNELS,
    START,
    Served,
    health_message,
    levels_message,
    map_message,
    serving,
    small_settings,
    status_message,
)

from soundrose._version import __version__

MOMENT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d\.\d{6}Z")
C, SPACING = 1500.0, 0.5


@pytest.mark.parametrize("topic", ["status", "health", "levels", "map"])
def test_topic_that_has_not_come_yet_is_503_with_retry_after(topic: str) -> None:
    with serving() as served:
        answer = served.get(f"/api/v1/{topic}")
        assert (answer.status, answer.headers["retry-after"]) == (503, "1")
        assert topic in answer.problem()["detail"]


def test_topics_are_the_newest_messages_with_times_as_text(served: Served) -> None:
    for topic, message in (("health", health_message()), ("levels", levels_message())):
        answer = served.get(f"/api/v1/{topic}")
        assert answer.headers["content-type"] == "application/json"
        assert answer.headers["cache-control"] == "no-store"
        found = answer.json()
        assert {key: found[key] for key in message.header} == message.header
        assert MOMENT.fullmatch(found["time"])


def test_status_adds_versions(served: Served) -> None:
    found = served.get("/api/v1/status").json()
    assert {key: found[key] for key in status_message().header} == dict(status_message().header)
    assert (found["version"], found["versions"]) == (__version__, [1])
    assert MOMENT.fullmatch(found["service_start_time"])


def test_readiness_names_what_is_not_up() -> None:
    with serving() as served:
        assert served.get("/livez").json() == {"status": "ok"}
        assert served.get("/readyz").problem()["not_ready"] == ["status"]
        served.latest.put(status_message("starting"))
        answer = served.get("/readyz")
        assert answer.status == 503
        assert answer.problem()["not_ready"] == ["ingest", "band:main", "band:low", "proxy", "serve"]
        served.latest.put(status_message())
        assert (served.get("/readyz").status, served.get("/readyz").json()) == (200, {"status": "ok"})


def test_array_tells_hydrophones_beams_and_channels_used() -> None:
    with serving(small_settings(exclude=(5,))) as served:
        found = served.get("/api/v1/array").json()
        assert [h["i"] for h in found["hydrophones"]] == list(range(CHANNELS))
        assert [h["i"] for h in found["hydrophones"] if not h["used"]] == [5]
        assert np.mean([h["position_m"] for h in found["hydrophones"]], axis=0) == pytest.approx(0, abs=1e-9)
        assert found["hydrophones"][0]["position_m"] == [0.5 * 23 / 2, 0.0, 0.0]
        served.latest.put(health_message({5: "excluded", 9: "dead", 12: "clipped"}))
        found = served.get("/api/v1/array").json()
        out = {h["i"]: h["why"] for h in found["hydrophones"] if not h["used"]}
        assert (out, found["used"]) == ({5: "excluded", 9: "dead"}, 22)
        main, low = found["bands"]
        assert main["channels_used"] == [i for i in range(CHANNELS) if i not in (5, 9)]
        assert low["channels_used"] == list(range(0, CHANNELS, 2))
        assert [main["weights"][i] for i in (5, 9)] == [0, 0]
        assert sum(main["weights"]) == pytest.approx(1, abs=1e-6)
        angles = [beam["cone_deg"] for beam in main["beams"]]
        np.testing.assert_allclose(np.cos(np.radians(angles)), np.linspace(1, -1, BEAMS), atol=1e-7)


def test_array_limits_follow_from_the_line(served: Served) -> None:
    """Transit L/c; alias onset c/(d(1+|u|)); far field (L sin)^2/wavelength with L = N d; widths and errors by sums."""
    main, low = served.get("/api/v1/array").json()["bands"]
    assert main["transit_s"] == pytest.approx(23 * SPACING / C)
    for band, spacing in ((main, SPACING), (low, 2 * SPACING)):
        assert band["spacing_m"] == pytest.approx(spacing)
        for beam in band["beams"]:
            onset = C / (spacing * (1 + abs(math.cos(math.radians(beam["cone_deg"])))))
            assert beam["alias_hz"] == pytest.approx(onset, rel=1e-6)
    for row in low["limits"]:
        f = row["f_hz"]
        for at in row["at"]:
            far = (12 * 1.0 * math.sin(math.radians(at["cone_deg"]))) ** 2 * f / C
            assert at["far_field_m"] == pytest.approx(far)
            for name, share in (("far_field", 1), ("half", 0.5), ("quarter", 0.25)):
                error = own_level_error(f, at["cone_deg"], far * share)
                assert at["level_error_db"][name] == pytest.approx(error, abs=2e-3)
            if at["beamwidth_deg"] is not None and at["beamwidth_deg"] < 60 and at["cone_deg"] == 90:
                edge = math.cos(math.radians(90 - at["beamwidth_deg"] / 2))
                assert own_pattern(f, edge) == pytest.approx(0.5, abs=1e-3)
    assert [at["cone_deg"] for at in low["limits"][0]["at"]] == [90.0, 30.0]
    assert any(at["beamwidth_deg"] for row in low["limits"] for at in row["at"])


PLACES = np.arange(12) * 1.0 - 5.5  # of the band `low`, uniform shading


def own_pattern(f_hz: float, cos: float) -> float:
    return abs(np.mean(np.exp(2j * np.pi * f_hz / C * PLACES * cos))) ** 2


def own_level_error(f_hz: float, cone_deg: float, distance_m: float) -> float:
    """Coherent sum over a spherical wavefront, steered to the direction of the source as if it were far away."""
    cos, sin = math.cos(math.radians(cone_deg)), math.sin(math.radians(cone_deg))
    ranges = np.hypot(distance_m * cos - PLACES, distance_m * sin)
    phase = 2j * np.pi * f_hz / C * (ranges - distance_m + PLACES * cos)
    return 20 * math.log10(abs(np.mean(np.exp(phase))))


def test_array_pattern_is_that_of_one_plane_wave(served: Served) -> None:
    low = served.get("/api/v1/array").json()["bands"][1]
    angles = np.radians([beam["cone_deg"] for beam in low["beams"]])
    assert {p["wave_cone_deg"] for p in low["pattern"]} == {90.0, 60.0, 30.0}
    for pattern in low["pattern"]:
        apart = math.cos(math.radians(pattern["wave_cone_deg"])) - np.cos(angles)
        own = [10 * math.log10(max(own_pattern(pattern["f_hz"], float(u)), 1e-12)) for u in apart]
        np.testing.assert_allclose(pattern["level_db"], own, atol=2e-3)
        assert max(pattern["level_db"]) <= 0


def test_array_has_a_tag_that_changes_with_health() -> None:
    with serving() as served:
        first = served.get("/api/v1/array")
        tag = first.headers["etag"]
        assert first.headers["cache-control"] == "no-cache"
        assert served.get("/api/v1/array", {"If-None-Match": f"W/{tag}"}).status == 304
        served.latest.put(health_message())
        assert served.get("/api/v1/array", {"If-None-Match": tag}).status == 304
        served.latest.put(health_message({9: "dead"}))
        assert served.get("/api/v1/array", {"If-None-Match": tag}).status == 200


def test_array_without_any_hydrophone_left_has_no_limits() -> None:
    with serving() as served:
        served.latest.put(health_message(dict.fromkeys(range(0, CHANNELS, 2), "dead")))
        main, low = served.get("/api/v1/array").json()["bands"]
        assert (low["channels_used"], low["limits"], low["pattern"], low["weights"]) == ([], [], [], None)
        assert main["limits"]


@pytest.mark.parametrize(
    "path", ["/nothing", "/api/v1/", "/api/v1/map/", "/docs", "/redoc", "/%00", "/../etc/passwd", "//"]
)
def test_unknown_path_is_404(served: Served, path: str) -> None:
    answer = served.get(path)
    assert answer.status == 404
    answer.problem()


@pytest.mark.parametrize("path", ["/api/v1/map", "/api/v1/status", "/", "/livez", "/openapi.json"])
def test_other_methods_are_405_and_options_say_which(served: Served, path: str) -> None:
    for method in ("PUT", "DELETE", "PATCH", "TRACE", "CONNECTED"):
        answer = served.get(path, method=method)
        assert answer.status == 405, method
        answer.problem()
        assert answer.headers["allow"] == "GET, HEAD, OPTIONS"
    answer = served.get(path, {"Content-Type": "application/json", "Content-Length": "0"}, "POST")
    assert answer.status == 405
    options = served.get(path, method="OPTIONS")
    assert (options.status, options.body, options.headers["allow"]) == (204, b"", "GET, HEAD, OPTIONS")
    assert served.get("/nothing", method="OPTIONS").status == 404


ANSWERS = ["/", "/plain", "/api", "/page.js", "/page.css", "/livez", "/readyz", "/openapi.json", "/api/v1/map",
           "/nothing", "/api/v1/map?bins=0", "/api/v1/map?format=png"]  # fmt: skip


@pytest.mark.parametrize("path", ANSWERS)
def test_every_answer_carries_the_security_headers(served: Served, path: str) -> None:
    for headers in ({}, {"Host": "elsewhere.example"}):
        found = served.get(path, headers).headers
        assert found["content-security-policy"].startswith("default-src 'self'; ")
        assert "unsafe" not in found["content-security-policy"]
        assert found["x-content-type-options"] == "nosniff"
        assert found["referrer-policy"] == "no-referrer"
        assert "server" not in found
        assert "access-control-allow-origin" not in found
        assert found["cache-control"] in ("no-store", "no-cache")


class Links(HTMLParser):
    """What a page loads or leads to, and whether it holds script or style of its own."""

    def __init__(self) -> None:
        super().__init__()
        self.found: list[str] = []
        self.inline = 0

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        given = dict(attrs)
        self.found += [given[name] or "" for name in ("src", "href") if name in given]
        self.inline += tag == "style" or (tag == "script" and "src" not in given) or "style" in given
        self.inline += any(name.startswith("on") for name in given)


@pytest.mark.parametrize("path", ["/plain", "/api"])
def test_pages_load_nothing_from_elsewhere_and_every_link_leads_somewhere(served: Served, path: str) -> None:
    answer = served.get(path)
    assert answer.headers["content-type"] == "text/html; charset=utf-8"
    page = Links()
    page.feed(answer.body.decode())
    assert page.found
    assert page.inline == 0
    for link in page.found:
        assert link.startswith("/")
        assert served.get(link).status == 200, link


def test_start_page_says_the_cautions_and_leads_to_the_calls(served: Served) -> None:
    page = served.get("/plain").body.decode()
    for words in ("Not a navigation or collision-avoidance aid", "50 to 2400 Hz", "port from starboard", 'href="/api"'):
        assert words in page


def test_page_of_calls_names_every_call_and_parameter(served: Served) -> None:
    page, document = served.get("/api").body.decode(), served.get("/openapi.json").json()
    for path, item in document["paths"].items():
        assert f"GET {path}" in page
        for parameter in item["get"].get("parameters", ()):
            assert f"<code>{parameter['name']}</code>" in page


def test_map_whose_bytes_do_not_fit_its_shape_is_no_answer() -> None:
    with serving() as served:
        served.latest.put(map_message(shape=[3, 3]))
        answer = served.get("/api/v1/map")
        assert (answer.status, answer.headers["retry-after"]) == (503, "1")
        assert "shape (3, 3)" in answer.problem()["detail"]


def test_tag_names_the_start(served: Served) -> None:
    assert START in served.get("/api/v1/spectrum?cone_deg=90").headers["etag"]
