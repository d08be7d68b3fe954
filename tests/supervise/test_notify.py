"""Notices to systemd: sd_notify(3), datagrams to NOTIFY_SOCKET. Read from a socket of the test's own."""

import socket

import pytest

from soundrose.notify import Systemd


@pytest.fixture
def listener(tmp_path, monkeypatch):
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as receiver:
        path = f"/{tmp_path.relative_to('/')}/n"
        receiver.bind(path)
        receiver.settimeout(5)
        monkeypatch.setenv("NOTIFY_SOCKET", path)
        monkeypatch.delenv("WATCHDOG_PID", raising=False)
        monkeypatch.delenv("WATCHDOG_USEC", raising=False)
        yield receiver


def test_ready_and_stopping_are_told(listener):
    systemd = Systemd()
    systemd.ready()
    systemd.stopping()
    assert listener.recv(999).split(b"\n")[0] == b"READY=1"
    assert listener.recv(999).split(b"\n")[0] == b"STOPPING=1"


def test_watchdog_beats_only_when_asked_for_and_not_more_often_than_due(listener, monkeypatch):
    Systemd().watchdog()
    monkeypatch.setenv("WATCHDOG_USEC", "60000000")
    systemd = Systemd()
    for _ in range(50):
        systemd.watchdog()
    systemd.ready()
    assert [listener.recv(999).split(b"\n")[0] for _ in range(2)] == [b"WATCHDOG=1", b"READY=1"]


def test_nothing_happens_without_systemd(monkeypatch):
    monkeypatch.delenv("NOTIFY_SOCKET", raising=False)
    Systemd().ready()


def test_socket_that_is_gone_does_no_harm(monkeypatch):
    monkeypatch.setenv("NOTIFY_SOCKET", "@soundrose-no-such-socket")
    Systemd().ready()
