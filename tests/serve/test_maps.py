"""The newest map in its four forms: they agree with each other, and with a reduction done here in float64."""

import http.client
import io
import json
import re
from itertools import product

import msgpack
import numpy as np
import pytest
from web_rig import BEAMS, BINS, DF_HZ, F0_HZ, START, Served, map_header, map_message, sea_levels, serving

#: RFC 3339, 5.6, as narrow as it is written here: UTC, microseconds
MOMENT = re.compile(r"\d{4}-(0[1-9]|1[0-2])-(0[1-9]|[12]\d|3[01])T([01]\d|2[0-3]):[0-5]\d:[0-5]\d\.\d{6}Z")
WITHIN_DB = 0.01


def groups(count: int, limit: int | None) -> list[slice]:
    """g = ceil(n / limit) neighbours from the first on."""
    size = 1 if limit is None else max(1, -(-count // limit))
    return [slice(start, min(start + size, count)) for start in range(0, count, size)]


def own_reduction(levels: np.ndarray, bins: int | None, beams: int | None, pick: str) -> np.ndarray:
    """Mean of power, or the largest, group by group, in float64."""
    power = 10 ** (levels.astype(np.float64) / 10)
    join = np.mean if pick == "mean" else np.max
    rows, columns = groups(len(levels), beams), groups(levels.shape[1], bins)
    return 10 * np.log10([[join(power[row, column]) for column in columns] for row in rows])


def query(**asked: object) -> str:
    return "/api/v1/map?" + "&".join(f"{key}={value}" for key, value in asked.items() if value is not None)


def all_forms(served: Served, **asked: object) -> dict[str, tuple[dict[str, object], np.ndarray]]:
    """format -> (header, levels) of json, msgpack and npy."""
    text = served.get(query(format="json", **asked)).json()
    packed = msgpack.unpackb(served.get(query(format="msgpack", **asked)).body)
    answer = served.get(query(format="npy", **asked))
    header = json.loads(answer.headers["soundrose-map"])
    found = {
        "json": (text, np.array(text["level_db"])),
        "msgpack": (packed, np.frombuffer(packed["level_db"], "<f4").reshape(packed["shape"])),
        "npy": (header, np.load(io.BytesIO(answer.body), allow_pickle=False)),
    }
    for head, levels in found.values():
        assert head["shape"] == list(levels.shape)
    return found


@pytest.mark.parametrize(
    ("bins", "beams"), [(BINS, BEAMS), (64, 73), (300, 20), (7, 5), (1, 1), (299, 72), (4096, 999)]
)
@pytest.mark.parametrize("pick", ["mean", "max"])
def test_forms_agree_with_a_reduction_in_double_precision(
    served: Served, bins: int, beams: int, pick: str
) -> None:  # fmt: skip
    expected = own_reduction(sea_levels(), bins, beams, pick)
    for name, (header, levels) in all_forms(served, bins=bins, beams=beams, pick=pick).items():
        assert levels.shape == expected.shape, name
        np.testing.assert_allclose(levels, expected, rtol=0, atol=WITHIN_DB, err_msg=name)
        first = groups(BINS, bins)[0]
        assert header["f0_hz"] == pytest.approx(F0_HZ + DF_HZ * (first.stop - 1) / 2, abs=1e-9)
        assert header["df_hz"] == pytest.approx(DF_HZ * first.stop, abs=1e-9)
        cosines = np.cos(np.radians(map_header()["cone_deg"]))
        angles = np.degrees(np.arccos([np.mean(cosines[group]) for group in groups(BEAMS, beams)]))
        np.testing.assert_allclose(header["cone_deg"], angles, rtol=0, atol=1e-5)  # texts have 6 decimals


def test_level_rows_of_one_map_are_the_published_ones(served: Served) -> None:
    for name, (_, levels) in all_forms(served, bins=BINS, beams=BEAMS).items():
        np.testing.assert_allclose(levels, sea_levels(), rtol=0, atol=0.0006 if name == "json" else 0)


def test_header_keeps_every_published_key(served: Served) -> None:
    published = map_header()
    for name, (header, _) in all_forms(served).items():
        for key in set(published) - {"cone_deg"}:
            assert header[key] == published[key], (name, key)


def test_times_are_rfc_3339_beside_nanoseconds(served: Served) -> None:
    for name in ("json", "npy"):
        header = all_forms(served)[name][0]
        assert MOMENT.fullmatch(str(header["time"]))
        assert (header["time"], header["time_end"]) == ("2026-12-01T14:00:00.000000Z", "2026-12-01T14:00:00.256000Z")


def test_range_keeps_the_bins_inside_and_their_frequencies(served: Served) -> None:
    first, last = 40, 90
    edges = F0_HZ + DF_HZ * first, F0_HZ + DF_HZ * last
    for f_min, f_max in (edges, (edges[0] - 1, edges[1] + 1)):
        for header, levels in all_forms(served, f_min=f_min, f_max=f_max).values():
            np.testing.assert_allclose(levels, sea_levels()[:, first : last + 1], rtol=0, atol=0.0006)
            assert header["f0_hz"] == pytest.approx(edges[0])


def test_range_is_cut_before_groups_are_formed(served: Served) -> None:
    expected = own_reduction(sea_levels()[:, 40:91], 13, None, "mean")
    asked = {"f_min": F0_HZ + DF_HZ * 40, "f_max": F0_HZ + DF_HZ * 90, "bins": 13}
    for _, levels in all_forms(served, **asked).values():
        np.testing.assert_allclose(levels, expected, rtol=0, atol=WITHIN_DB)


def test_json_is_at_most_512_by_181_unless_asked_for() -> None:
    levels = np.random.default_rng(1).normal(60, 5, (400, 1300)).astype("<f4")
    cone = np.degrees(np.arccos(np.linspace(1, -1, 400))).tolist()
    with serving() as served:
        served.latest.put(map_message(levels, shape=[400, 1300], cone_deg=cone))
        assert served.get("/api/v1/map").json()["shape"] == [134, 434]  # groups of 3 and 3
        assert served.get("/api/v1/map?bins=1300&beams=400").json()["shape"] == [400, 1300]
        assert msgpack.unpackb(served.get("/api/v1/map?format=msgpack").body)["shape"] == [400, 1300]
        text = served.get("/api/v1/map").json()
        np.testing.assert_allclose(text["level_db"], own_reduction(levels, 512, 181, "mean"), rtol=0, atol=WITHIN_DB)


def test_silence_and_thunder_stay_finite() -> None:
    levels = np.full((BEAMS, BINS), -300.0, "<f4")
    levels[0, 0] = 250.0
    with serving() as served:
        served.latest.put(map_message(levels))
        for header, found in all_forms(served, bins=10, beams=10).values():
            assert np.isfinite(found).all()
            assert found.min() == -300.0, header
        assert b"NaN" not in served.get("/api/v1/map").body


def test_band_is_the_first_unless_named(served: Served) -> None:
    assert served.get("/api/v1/map").json()["band"] == "main"
    assert served.get("/api/v1/map?band=main").json()["band"] == "main"


def test_unknown_band_is_404_and_a_band_without_map_503(served: Served) -> None:
    for path in ("/api/v1/map?band=", "/api/v1/spectrum?cone_deg=90&band="):
        problem = served.get(path + "other")
        assert (problem.status, problem.problem()["bands"]) == (404, ["main", "low"])
        waiting = served.get(path + "low")
        waiting.problem()
        assert (waiting.status, waiting.headers["retry-after"]) == (503, "1")


NUMBERS = ["nan", "inf", "-inf", "-1", "1e10", "x", "", "0x10", "1,5"]
BAD = [
    *(f"{key}={value}" for key, value in product(("f_min", "f_max"), NUMBERS)),
    *(f"{key}={value}" for key, value in product(("bins", "beams"), ["0", "-3", "1.5", "x", "", "nan", "99999999999"])),
    "f_min=900&f_max=800", "f_min=2000&f_max=2300", "f_max=1", "f_min=100&f_max=101",
    "format=", "format=jpeg", "format=PNG", "pick=", "pick=median",
    "format=png&width=100", "format=png&height=9999", "format=png&level_min=90&level_max=90.5",
    "format=png&level_min=nan", "format=png&level_max=900",
]  # fmt: skip


@pytest.mark.parametrize("asked", BAD)
def test_bad_parameter_is_422_and_says_why(served: Served, asked: str) -> None:
    answer = served.get(f"/api/v1/map?{asked}")
    assert answer.status == 422, asked
    detail = answer.problem()["detail"]
    assert any(word in detail for word in re.findall(r"[a-z_]+(?==)", asked)), detail


def test_spectrum_is_that_of_the_nearest_beam(served: Served) -> None:
    angles = np.array(map_header()["cone_deg"])
    for asked in (0, 5, 33.3, 90, 91, 120, 179, 180):
        found = served.get(f"/api/v1/spectrum?cone_deg={asked}").json()
        beam = int(np.argmin(np.abs(np.cos(np.radians(angles)) - np.cos(np.radians(asked)))))
        assert found["cone_deg"] == pytest.approx(angles[beam], abs=1e-6)
        np.testing.assert_allclose(found["level_db"], sea_levels()[beam], rtol=0, atol=0.0006)
        assert (found["f0_hz"], found["df_hz"], found["seq"], found["kind"]) == (F0_HZ, DF_HZ, 7, "spectrum")


@pytest.mark.parametrize("asked", ["", "cone_deg=", "cone_deg=-1", "cone_deg=180.1", "cone_deg=nan", "cone_deg=x"])
def test_spectrum_of_no_direction_is_422(served: Served, asked: str) -> None:
    answer = served.get(f"/api/v1/spectrum?{asked}")
    assert answer.status == 422
    assert "cone_deg" in answer.problem()["detail"]


def test_tag_is_start_seq_and_what_was_asked(served: Served) -> None:
    paths = [
        "format=json", "format=msgpack", "format=npy", "format=png", "bins=20", "beams=20", "pick=max", "f_min=100",
        "f_max=900", "format=png&width=500", "format=png&height=500", "format=png&level_min=20",
    ]  # fmt: skip
    tags = [served.get("/api/v1/map?" + path).headers["etag"] for path in paths]
    assert all(re.fullmatch(rf'"{START}-7-[0-9a-f]+"', tag) for tag in tags)
    assert len(set(tags)) == len(tags)
    same = [served.get(path).headers["etag"] for path in ("/api/v1/map", "/api/v1/map?bins=512&beams=181")]
    assert same == [tags[0], tags[0]]


def test_known_tag_is_304_until_the_next_map() -> None:
    with serving() as served:
        served.fill()
        first = served.get("/api/v1/map?bins=10")
        tag = first.headers["etag"]
        assert first.headers["cache-control"] == "no-cache"
        for known in (tag, f"W/{tag}", f'"other", {tag}', f'W/"other" ,\tW/{tag}', "*", f"{tag},"):
            answer = served.get("/api/v1/map?bins=10", {"If-None-Match": known})
            assert (answer.status, answer.body, answer.headers["etag"]) == (304, b"", tag), known
            assert answer.headers["cache-control"] == "no-cache"
        for other in ('"other"', tag.strip('"'), "", '"', f'"{tag}"x'):
            assert served.get("/api/v1/map?bins=10", {"If-None-Match": other}).status == 200, other
        assert served.get("/api/v1/map?bins=11", {"If-None-Match": tag}).status == 200
        served.latest.put(map_message(seq=8))
        assert served.get("/api/v1/map?bins=10", {"If-None-Match": tag}).status == 200
        served.latest.put(map_message(seq=7, start="f" * 16))
        assert served.get("/api/v1/map?bins=10", {"If-None-Match": tag}).status == 200


def test_head_has_the_headers_of_get_and_no_body(served: Served) -> None:
    for path in ("/api/v1/map", "/api/v1/map?format=npy", "/api/v1/status", "/api/v1/array", "/", "/livez"):
        got, head = served.get(path), served.get(path, method="HEAD")
        assert (head.status, head.body) == (200, b"")
        for name in ("content-type", "content-length", "etag", "soundrose-map"):
            assert head.headers.get(name) == got.headers.get(name), (path, name)


def test_many_who_ask_the_same_get_the_same(served: Served) -> None:
    links = [http.client.HTTPConnection("127.0.0.1", served.port, timeout=20) for _ in range(30)]
    for link in links:
        link.request("GET", "/api/v1/map?format=png&width=700")
    answers = [link.getresponse().read() for link in links]
    for link in links:
        link.close()
    assert len(set(answers)) == 1
    assert answers[0].startswith(b"\x89PNG")
