"""How the service starts and ends: exit statuses, lines on standard error, and never a process left behind."""

import os
import signal
import socket
from collections.abc import Iterator
from contextlib import closing
from pathlib import Path

import pytest
from rig import (
    ArrayModel,
    Block,
    Service,
    block_message,
    encode_samples,
    run_command,
    sensor_noise,
    toml_text,
    wait_until,
)

ARRAY = ArrayModel()
SETTINGS = ARRAY.settings(ARRAY.band(name="low", channels="0:32:2", band_hz=[100.0, 700.0]), ARRAY.band(name="high"))
NOISE = encode_samples(sensor_noise(32, 1000, 8000.0, 90.0) / ARRAY.full_scale_upa, "i2", "channel")


@pytest.fixture
def busy(tmp_path: Path) -> Iterator[Service]:
    """A service of two bands at work, maps coming; whatever becomes of it, nothing is left after the test."""
    service = Service(SETTINGS, tmp_path)
    try:
        with service.listener() as listener, service.feeder() as feeder:
            for i in range(20):
                block = Block(i * 1000, 1000, 10**18 + i * 125_000_000, NOISE)
                feeder.send(block_message(ARRAY, block, "a", type="i2"))
            listener.wait_count("map/low", 5)
            listener.wait_count("map/high", 5)
            assert len(service.processes()) >= 6, "supervisor, ingest, two bands, proxy, serve"
            yield service
    finally:
        service.kill()


def test_no_process_is_left_two_seconds_after_the_supervisor_is_killed(busy: Service) -> None:
    os.kill(busy.process.pid, signal.SIGKILL)
    busy.process.wait(5)
    wait_until(f"all gone, not {busy.processes()}", lambda: not busy.processes(), 2.0)


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT], ids=["SIGTERM", "SIGINT"])
def test_a_signal_ends_it_in_order_within_five_seconds(busy: Service, number: int) -> None:
    assert busy.end(number, deadline_s=5.0) == 0
    wait_until(f"all gone, not {busy.processes()}", lambda: not busy.processes(), 1.0)
    assert "Traceback" not in busy.stderr


def test_an_orderly_end_while_a_source_is_held_back(tmp_path: Path) -> None:
    """In `hold` the feed may be full and the source waiting: the end must not wait for either."""
    settings = ARRAY.settings(ARRAY.band(beams=2881, map_beams=97))
    service = Service(settings, tmp_path)
    try:
        with service.listener() as listener, service.feeder() as feeder:
            for i in range(400):
                block = Block(i * 1000, 1000, 10**18 + i * 125_000_000, NOISE)
                feeder.send(block_message(ARRAY, block, "a", type="i2"))
                if listener.of("map/main"):
                    break
            assert service.end(signal.SIGTERM, deadline_s=5.0) == 0
            wait_until("all gone", lambda: not service.processes(), 1.0)
            feeder.abandon()
    finally:
        service.kill()


def taken_port(kind: str, port: int) -> dict:
    """Settings that ask for that port."""
    settings = ARRAY.settings()
    if kind == "http":
        settings["serve"]["port"] = port
    else:
        settings[kind]["bind"] = f"tcp://127.0.0.1:{port}"
    return settings


@pytest.mark.parametrize("kind", ["feed", "publish", "http"])
def test_a_port_in_use_ends_the_start_with_status_3_and_says_which(tmp_path: Path, kind: str) -> None:
    with closing(socket.socket()) as taken:
        taken.bind(("127.0.0.1", 0))
        taken.listen()
        port = taken.getsockname()[1]
        config = tmp_path / "aft.toml"
        config.write_text(toml_text(taken_port(kind, port)), encoding="utf-8")
        ended = run_command("run", "--config", str(config), cwd=tmp_path)
    assert ended.returncode == 3, ended.stderr
    assert ended.stdout == ""
    told = [line for line in ended.stderr.splitlines() if str(port) in line]
    assert len(told) == 1, ended.stderr
    assert "in use" in told[0].lower()
    assert "Traceback" not in ended.stderr


def test_a_store_that_cannot_be_written_ends_the_start_with_status_3(tmp_path: Path) -> None:
    """A file stands where the folder should be: that stops even the superuser."""
    (tmp_path / "store").write_text("a file", encoding="utf-8")
    (tmp_path / "aft.toml").write_text(toml_text(ARRAY.settings()), encoding="utf-8")
    ended = run_command("run", "--config", "aft.toml", cwd=tmp_path)
    assert ended.returncode == 3, ended.stderr
    assert "store" in ended.stderr
    assert ended.stdout == ""


#: where -> wrong value; none hides another, as a wrong rate would hide what is judged by the rate
MISTAKES = {
    "feed.overload": "wait", "feed.bandwidth": 3, "serve.port": 70_000, "publish.bind": "here",
    "bands[0].frame": 128, "bands[0].beams": 1, "bands[0].shading": "round", "bands[0].average_s": -1.0,
    "bands[0].name": "Main", "bands[0].band_hz": [50.0, 3900.0],
}  # fmt: skip
ALONE = {"array.hydrophones": 0, "array.spacing_m": 0.0, "feed.rate_hz": -1.0, "water.sound_speed_m_s": 0.0}


def spoilt(mistakes: dict) -> str:
    """Text of settings with these mistakes in them."""
    settings = ARRAY.settings()
    for where, value in mistakes.items():
        table, key = where.split(".")
        (settings["bands"][0] if table == "bands[0]" else settings[table])[key] = value
    return toml_text(settings)


@pytest.mark.parametrize("command", [("run", "--config"), ("check",)], ids=["run", "check"])
def test_every_mistake_in_the_settings_is_one_line_on_standard_error(tmp_path: Path, command: tuple[str, ...]) -> None:
    (tmp_path / "aft.toml").write_text(spoilt(MISTAKES), encoding="utf-8")
    ended = run_command(*command, "aft.toml", cwd=tmp_path)
    assert ended.returncode == 2, ended.stderr
    assert ended.stdout == ""
    lines = ended.stderr.splitlines()
    for where in MISTAKES:
        told = [line for line in lines if line.startswith(f"aft.toml: {where}: ")]
        assert len(told) == 1, f"{where} in\n{ended.stderr}"
    assert len(lines) == len(MISTAKES), ended.stderr


@pytest.mark.parametrize("where", [*ALONE, "bands[0].frame"])
def test_one_mistake_is_one_line_that_says_what_was_got_and_what_is_allowed(tmp_path: Path, where: str) -> None:
    value = (ALONE | MISTAKES)[where]
    (tmp_path / "aft.toml").write_text(spoilt({where: value}), encoding="utf-8")
    ended = run_command("check", "aft.toml", cwd=tmp_path)
    assert (ended.returncode, ended.stdout) == (2, "")
    assert len(ended.stderr.splitlines()) == 1, ended.stderr
    assert ended.stderr.startswith(f"aft.toml: {where}: got {value}; must be ")


def test_settings_that_are_no_toml_or_not_there_end_with_status_2(tmp_path: Path) -> None:
    (tmp_path / "broken.toml").write_text("[array\nid = ", encoding="utf-8")
    for name in ("broken.toml", "absent.toml"):
        ended = run_command("run", "--config", name, cwd=tmp_path)
        assert (ended.returncode, ended.stdout) == (2, ""), ended.stderr
        assert len(ended.stderr.splitlines()) == 1, ended.stderr
        assert name in ended.stderr


def test_check_prints_the_limits_of_the_array_as_tables(tmp_path: Path) -> None:
    (tmp_path / "aft.toml").write_text(toml_text(SETTINGS), encoding="utf-8")
    ended = run_command("check", "aft.toml", cwd=tmp_path)
    assert ended.returncode == 0, ended.stderr
    text = ended.stdout.lower()
    words = "transit time, width, gain, far field, alias onset, lost at, bins, frame, memory, load, heard"
    for word in words.split(", "):
        assert word in text, f"nothing about {word!r}"
    assert "low" in text
    assert "high" in text


def test_version_is_printed(tmp_path: Path) -> None:
    ended = run_command("--version", cwd=tmp_path)
    assert ended.returncode == 0
    assert ended.stdout.split()[0] == "soundrose"
    assert ended.stdout.split()[1][0].isdigit()


@pytest.mark.parametrize("command", ["run", "demo", "check", "feed file", "band", "bench"])
def test_help_of_a_command_has_examples(tmp_path: Path, command: str) -> None:
    ended = run_command(*command.split(), "--help", cwd=tmp_path)
    assert ended.returncode == 0, ended.stderr
    assert "example" in ended.stdout.lower()
    assert f"soundrose {command}" in ended.stdout
