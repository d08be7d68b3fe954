"""What tests of the feed share: small arrays whose counts are micropascal, and a source that sends to an intake."""

from dataclasses import dataclass, field

import numpy as np
import pytest

from soundrose.feed.hop import Hop
from soundrose.feed.intake import Intake
from soundrose.feed.messages import encode_samples
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    FeedSettings,
    Settings,
    WaterSettings,
)

T0 = 1_796_133_600 * 10**9


def make_settings(channels=3, rate_hz=1000.0, frames=(64,), exclude=(), full_scale_v=2.0**15):
    """A line whose 16-bit counts are micropascal, unless `full_scale_v` is another."""
    every = tuple(range(channels))
    return Settings(
        array=ArraySettings("aft", tuple((-0.5 * i, 0.0, 0.0) for i in every), exclude, 0.5),
        feed=FeedSettings(rate_hz=rate_hz),
        calibration=CalibrationSettings(
            (0.0,) * channels, (0.0,) * channels, (full_scale_v,) * channels, (0.0,) * channels
        ),
        water=WaterSettings(1500.0),
        bands=tuple(BandSettings(f"b{i}", (10.0, 400.0), frame, 9, every) for i, frame in enumerate(frames)),
    )


@dataclass
class Source:
    """Sends blocks of a signal that is a function of the index to an intake, and keeps what comes out."""

    settings: Settings
    intake: Intake
    run: str = "a"
    out: list = field(default_factory=list)

    def t(self, index):
        return T0 + round(index * 1e9 / self.settings.feed.rate_hz)

    def signal(self, first, samples):
        """A ramp, another in each channel: a sample lost or doubled shows."""
        channels = self.settings.array.channels
        return (np.arange(first, first + samples) % 8000 + 8000 * np.arange(channels)[:, None]).astype(np.int64)

    def block(self, first, samples, *, t=None, run=None, values=None, **form):
        """Send one; what came of it."""
        values = self.signal(first, samples) if values is None else values
        t = self.t(first) if t is None else t
        rate = self.settings.feed.rate_hz
        form = {"type": "i2"} | form
        return self.send(encode_samples("aft", run or self.run, first, t, rate, values, **form))

    def send(self, parts):
        out = self.intake.push(parts)
        self.out += out
        return out

    @property
    def hops(self):
        return [item for item in self.out if isinstance(item, Hop)]

    def counts(self):
        """Counters that are not 0, those of `dropped` by their reason."""
        plain = {name: getattr(self.intake.counters, name) for name in self.intake.counters.__dataclass_fields__}
        dropped = plain.pop("dropped")
        return {name: n for name, n in (plain | dropped).items() if n}


@pytest.fixture(scope="session")
def settings_for():
    """make_settings"""
    return make_settings


@pytest.fixture(scope="session")
def source_for():
    """A new source and its intake, by the arguments of `make_settings`."""

    def make(snapshot=None, **kinds):
        settings = make_settings(**kinds)
        return Source(settings, Intake(settings, snapshot))

    return make
