"""core: the tables [feed], [detection], [stream], [publish], [serve], [store] and [log] of the settings file."""

import re
from typing import Any, cast, get_args

from soundrose.settings_reader import Notes, Table
from soundrose.settings_types import (
    DetectionSettings,
    FeedSettings,
    LogFormat,
    LogSettings,
    Overload,
    PublishSettings,
    ServeSettings,
    StoreSettings,
    StreamSettings,
)

__all__ = [
    "check_endpoints", "endpoint_problem", "parse_detection", "parse_feed", "parse_log", "parse_publish",
    "parse_serve", "parse_store", "parse_stream",
]  # fmt: skip

#: bytes of a Unix socket's path, its closing zero taken off; '{pid}' may grow to 7 digits
IPC_BYTES = 107
LONGEST_PID = "4194304"
MAX_RATE_HZ = 1e7
_ENDPOINT = "must be tcp://host:port (port 0 or * for any free one) or ipc://path of at most 107 bytes"


def parse_feed(values: Any, notes: Notes) -> tuple[FeedSettings, float | None]:
    """[feed], and the rate apart: None where it has a mistake."""
    table, default = Table(values, "feed", notes), FeedSettings()
    bind = _endpoint(table, "bind", default.bind)
    rate = table.number(
        "rate_hz",
        default.rate_hz,
        f"must be a number of Hz above 0, at most {MAX_RATE_HZ:g}",
        above=0,
        high=MAX_RATE_HZ,
    )
    overload = table.word("overload", default.overload, get_args(Overload))
    table.close()
    return FeedSettings(bind, rate or default.rate_hz, cast(Overload, overload)), rate


def parse_detection(values: Any, notes: Notes) -> DetectionSettings:
    table, default = Table(values, "detection", notes), DetectionSettings()
    enabled = table.flag("enabled", default.enabled)
    pfa = table.number("pfa", default.pfa, "must be a probability above 0 and at most 0.1", above=0, high=0.1)
    integrate = table.number("integrate_s", None, "must be a number of seconds, at least 0", low=0)
    most = "must be a whole number from {} to 65536"
    beams = table.integer("max_beams", default.max_beams, most.format(2), low=2, high=65536)
    bins = table.integer("max_bins", default.max_bins, most.format(1), low=1, high=65536)
    table.close()
    return DetectionSettings(bool(enabled), pfa or default.pfa, integrate, beams or 2, bins or 1)


def parse_stream(values: Any, notes: Notes) -> StreamSettings:
    table, default = Table(values, "stream", notes), StreamSettings()
    ends = {key: _endpoint(table, key, getattr(default, key)) for key in ("bind", "collect", "control", "commands")}
    table.close()
    return StreamSettings(**ends)


def parse_publish(values: Any, notes: Notes) -> PublishSettings:
    table = Table(values, "publish", notes)
    bind = _endpoint(table, "bind", PublishSettings().bind)
    table.close()
    return PublishSettings(bind)


def parse_serve(values: Any, notes: Notes) -> ServeSettings:
    table, default = Table(values, "serve", notes), ServeSettings()
    host = table.text("host", default.host, "must be a host name or address", pattern=r"[A-Za-z0-9._:-]{1,253}")
    port = table.integer("port", default.port, "must be a port from 0 (any free one) to 65535", low=0, high=65535)
    table.close()
    if host is not None and not _is_loopback(host):
        notes.warning("serve.host", f'"{host}" may be reached from other hosts, and access control is not there yet')
    return ServeSettings(host or default.host, default.port if port is None else port)


def parse_store(values: Any, notes: Notes) -> StoreSettings:
    table, default = Table(values, "store", notes), StoreSettings()
    path = table.text("path", default.path, "must be the path of a folder")
    days = table.number(
        "retain_days", default.retain_days, "must be a number of days above 0, at most 36500", above=0, high=36500
    )
    size = table.integer(
        "retain_mb", default.retain_mb, "must be a whole number of megabytes from 1 to 1000000", low=1, high=10**6
    )
    table.close()
    return StoreSettings(path or default.path, days or default.retain_days, size or default.retain_mb)


def parse_log(values: Any, notes: Notes) -> LogSettings:
    table, default = Table(values, "log", notes), LogSettings()
    form = table.word("format", default.format, get_args(LogFormat))
    table.close()
    return LogSettings(cast(LogFormat, form or default.format))


def endpoint_problem(endpoint: str) -> str | None:
    """What an endpoint must be, where it is none; '{pid}' stands for the supervisor's process number."""
    if endpoint.startswith("tcp://"):
        parts = re.fullmatch(r"tcp://(?:[A-Za-z0-9._-]{1,253}|\*|\[[0-9A-Fa-f:.%]+\]):(\*|[0-9]{1,5})", endpoint)
        good = parts is not None and (parts[1] == "*" or int(parts[1]) <= 65535)
        return None if good else _ENDPOINT
    path = endpoint.removeprefix("ipc://").replace("{pid}", LONGEST_PID)
    good = endpoint.startswith("ipc://") and path.strip("@") != "" and "\x00" not in path
    return None if good and len(path.encode()) <= IPC_BYTES else _ENDPOINT


def check_endpoints(feed: FeedSettings, stream: StreamSettings, publish: PublishSettings, notes: Notes) -> None:
    """Note two sockets on one address, and addresses that other hosts can reach."""
    taken: dict[str, str] = {}
    ends = {
        "feed.bind": feed.bind, "publish.bind": publish.bind, "stream.bind": stream.bind,
        "stream.collect": stream.collect, "stream.control": stream.control, "stream.commands": stream.commands,
    }  # fmt: skip
    for where, endpoint in ends.items():
        if (
            re.fullmatch(r"tcp://.*:(\*|0+)", endpoint) is None
            and (other := taken.setdefault(endpoint, where)) != where
        ):
            notes.problem(where, f'got "{endpoint}", which is that of {other}; must be an address of its own')
        host = re.fullmatch(r"tcp://\[?(.*?)\]?:[^:]*", endpoint)
        if host and not _is_loopback(host[1]):
            notes.warning(where, f'"{endpoint}" may be reached from other hosts, and access control is not there yet')


def _is_loopback(host: str) -> bool:
    return host in ("localhost", "::1", "lo") or re.fullmatch(r"127(\.[0-9]{1,3}){3}", host) is not None


def _endpoint(table: Table, key: str, default: str) -> str:
    endpoint = table.text(key, default, _ENDPOINT, pattern=r"(?s:.*)")
    if endpoint is not None and (must := endpoint_problem(endpoint)):
        table.got(key, must)
    return endpoint or default
