"""process: tells systemd what the service does (sd_notify protocol), when systemd asked to be told."""

import contextlib
import os
import socket
import time

__all__ = ["Systemd"]


class Systemd:
    """Datagrams to the socket that NOTIFY_SOCKET names (sd_notify(3)); nothing happens without it.

    Only the supervisor speaks: with Type=notify systemd listens to the main process alone (NotifyAccess=main). A
    watchdog beat is due every half of WATCHDOG_USEC, and `watchdog` must be called from the loop it vouches for.
    """

    def __init__(self) -> None:
        self._address = os.environ.get("NOTIFY_SOCKET", "")
        micro = os.environ.get("WATCHDOG_USEC", "")
        mine = os.environ.get("WATCHDOG_PID", str(os.getpid())) == str(os.getpid())
        self._every_s = int(micro) / 2e6 if micro.isdigit() and mine else 0.0
        self._next = 0.0

    def ready(self) -> None:
        self._send("READY=1\nSTATUS=up: feed, publish and HTTP addresses are bound")

    def stopping(self) -> None:
        self._send("STOPPING=1\nSTATUS=ending in order")

    def status(self, text: str) -> None:
        self._send(f"STATUS={text}")

    def watchdog(self) -> None:
        """Say that the loop goes round, as often as systemd wants to hear it."""
        now = time.monotonic()
        if self._every_s and now >= self._next:
            self._next = now + self._every_s
            self._send("WATCHDOG=1")

    def _send(self, text: str) -> None:
        if not self._address:
            return
        address = "\0" + self._address[1:] if self._address.startswith("@") else self._address
        with contextlib.suppress(OSError), socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as sender:
            sender.setblocking(False)
            sender.sendto(text.encode(), address)
