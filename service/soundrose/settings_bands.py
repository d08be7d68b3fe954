"""core: the [[bands]] of the settings file, each checked against the array it stands on."""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, cast, get_args

import numpy as np
from numpy.typing import NDArray

from soundrose.array.budget import bin_range, weight_bytes, why_not_pairs
from soundrose.array.filters import is_smooth, max_delay_samples, min_frame, next_frame, tap_count
from soundrose.array.geometry import Geometry, line_geometry
from soundrose.array.shading import shading_weights
from soundrose.errors import UsageError
from soundrose.settings_reader import Notes, Table, finite, is_integer, shown
from soundrose.settings_types import (
    ArraySettings,
    BandSettings,
    CalibrationSettings,
    KernelChoice,
    Place,
    ShadingName,
    WaterSettings,
)

__all__ = ["Surroundings", "parse_bands"]

MAX_BANDS = 32  # one process each
MAX_FRAME = 1 << 20
MAX_BEAMS = 4096
MAX_WEIGHT_BYTES = 4 << 30
#: above this share of the frame the wrap left in the map is worse than -69 dB re one hydrophone
WARN_TAP_SHARE = 0.25


@dataclass(frozen=True, slots=True)
class Surroundings:
    """What a band is checked against; None for a part that itself has mistakes: then its checks are not made."""

    array: ArraySettings | None
    calibration: CalibrationSettings | None
    water: WaterSettings | None
    rate_hz: float | None


def parse_bands(values: Any | None, notes: Notes, around: Surroundings) -> tuple[BandSettings, ...]:
    """All bands that could be read; whatever is wrong is in `notes`."""
    if values is None or not isinstance(values, list) or not 1 <= len(values) <= MAX_BANDS:
        got = "missing" if values is None else f"got {len(values) if isinstance(values, list) else shown(values)}"
        notes.problem("bands", f"{got}; must be 1 to {MAX_BANDS} tables [[bands]]")
        return ()
    bands = [_Band(Table(value, f"bands[{i}]", notes), around).read() for i, value in enumerate(values)]
    _check_names(values, notes)
    return tuple(band for band in bands if band is not None)


def _check_names(values: Sequence[Any], notes: Notes) -> None:
    """Topics are matched by prefix: a name that begins with another band's name would get its maps too."""
    names = [value.get("name") if isinstance(value, dict) else None for value in values]
    for i, name in enumerate(names):
        for j, other in enumerate(names):
            clash = isinstance(name, str) and isinstance(other, str) and other and name.startswith(other)
            if clash and i != j and (name != other or j < i):
                what = "the name of" if name == other else "which begins with the name of"
                notes.problem(f"bands[{i}].name", f'got "{name}", {what} bands[{j}]; must not begin with another name')


class _Band:
    """The reading of one band, key by key; a check is made only when what it rests on was right."""

    def __init__(self, table: Table, around: Surroundings) -> None:
        self.table, self.around = table, around
        self.geometry: Geometry | None = None
        self.weights: NDArray[np.float64] | None = None
        self.bins: int | None = None

    def read(self) -> BandSettings | None:
        table, problems = self.table, len(self.table.notes.problems)
        if not table.is_table:
            return None
        name = table.text(
            "name", None, "must be a lower-case letter, then up to 31 of a-z, 0-9 and '-'",
            pattern=r"[a-z][a-z0-9-]{0,31}", required=True,
        )  # fmt: skip
        band_hz, channels = self._band_hz(), self._channels()
        if channels is not None and self.around.array is not None:
            self.geometry = line_geometry(np.array(self.around.array.positions_m), channels)
        frame = self._frame()
        self._count_bins(band_hz, frame)
        shading, shading_db = self._shading()
        kernel = table.word("kernel", "auto", get_args(KernelChoice))
        beams = self._beams(kernel)
        place = table.word("place", "here", get_args(Place))
        average_s = table.number("average_s", 2.0, "must be a number of seconds, at least 0", low=0)
        map_rate, map_beams, map_bins = self._published(frame, beams)
        table.close()
        if len(table.notes.problems) > problems or channels is None:
            return None
        self._warn(cast(int, frame))
        return BandSettings(
            cast(str, name), cast("tuple[float, float]", band_hz), cast(int, frame), cast(int, beams), channels,
            cast("ShadingName | tuple[float, ...]", shading), cast(float, shading_db), cast(float, average_s),
            cast(Place, place), cast(KernelChoice, kernel), map_rate, map_beams, map_bins,
        )  # fmt: skip

    def _band_hz(self) -> tuple[float, float] | None:
        rate = self.around.rate_hz
        top = "0.45 of the rate" if rate is None else f"0.45 of the rate ({0.45 * rate:g})"
        must = f"must be two numbers of Hz, 0 <= low < high <= {top}"
        value = self.table.raw("band_hz", None, must, required=True)
        if value is None:
            return None
        edges = [finite(edge) for edge in value] if isinstance(value, list) else []
        low, high = edges if len(edges) == 2 else (None, None)
        # a high edge written as 0.45 of the rate, rounded to double, is at it and not above it
        if (
            low is None
            or high is None
            or not 0 <= low < high
            or (rate is not None and high > 0.45 * rate * (1 + 1e-12))
        ):
            self.table.got("band_hz", must)
            return None
        return low, high

    def _channels(self) -> tuple[int, ...] | None:
        count = None if self.around.array is None else self.around.array.channels
        value = self.table.raw("channels", None, "")
        if count is None:
            return None
        chosen = tuple(range(count)) if value is None else _chosen(value, count)
        if chosen is None:
            self.table.got(
                "channels",
                f'must be a slice "first:stop:step" or a list of at least 2 different channels, 0 to {count - 1}',
            )
            return None
        exclude = self.around.array.exclude if self.around.array else ()
        if len(set(chosen) - set(exclude)) < 2:
            left = len(set(chosen) - set(exclude))
            self.table.notes.problem(
                f"{self.table.where}.channels",
                f"array.exclude leaves {left} of {len(chosen)} hydrophones; must leave 2",
            )
            return None
        return chosen

    def _taps(self) -> int | None:
        around = self.around
        if self.geometry is None or around.calibration is None or around.water is None or around.rate_hz is None:
            return None
        skews = [around.calibration.delay_s[channel] for channel in self.geometry.channels]
        return tap_count(max_delay_samples(self.geometry, around.water.sound_speed_m_s, around.rate_hz, skews))

    def _frame(self) -> int | None:
        taps = self._taps()
        lowest = 4 if taps is None else min_frame(taps)
        for_this = "" if taps is None else " for this array"
        if lowest > MAX_FRAME:
            self.table.has("frame")
            self.table.notes.problem(
                f"{self.table.where}.frame", f"this array takes a frame of {lowest}; the longest allowed is {MAX_FRAME}"
            )
            return None
        must = f"must be even and at least {lowest}{for_this}"
        frame = self.table.integer("frame", 4096, must, low=lowest, high=2**62)
        if frame is None:
            return None
        if frame % 2:
            self.table.notes.problem(f"{self.table.where}.frame", f"got {frame}; {must}")
        elif frame > MAX_FRAME:
            self.table.notes.problem(f"{self.table.where}.frame", f"got {frame}; must be at most {MAX_FRAME}")
        elif not is_smooth(frame):
            self.table.notes.problem(
                f"{self.table.where}.frame",
                f"got {frame}; must have no factors but 2, 3, 5 and 7: {next_frame(frame)} is next",
            )
        else:
            return frame
        return None

    def _count_bins(self, band_hz: tuple[float, float] | None, frame: int | None) -> None:
        rate = self.around.rate_hz
        if band_hz is None or frame is None or rate is None:
            return
        first, stop = bin_range(band_hz, frame, rate)
        if first == stop:
            self.table.got("band_hz", f"must hold at least one bin; bins are {rate / frame:g} Hz apart for this frame")
            return
        self.bins = stop - first

    def _shading(self) -> tuple[str | tuple[float, ...] | None, float | None]:
        table, names = self.table, get_args(ShadingName)
        shading_db = table.number("shading_db", 30.0, "must be a number of dB above 0, at most 120", above=0, high=120)
        value = table.raw("shading", "hann", "")
        if isinstance(value, list):
            numbers = [finite(weight) for weight in value]
            shading: Any = tuple(n for n in numbers if n is not None and n >= 0)
            if len(shading) < len(numbers) or not sum(shading) > 0:
                table.got("shading", "must be finite weights, none below 0, not all 0")
                return None, shading_db
        else:
            shading = table.word("shading", "hann", names)
        if shading is None or shading_db is None or self.geometry is None:
            return shading, shading_db
        try:
            self.weights = shading_weights(shading, self.geometry, shading_db)
        except UsageError as error:
            table.notes.problem(f"{table.where}.shading", str(error))
            return None, shading_db
        self._check_left()
        return shading, shading_db

    def _check_left(self) -> None:
        """Hydrophones left out are zeroed and the rest rescaled: the rest must weigh something."""
        exclude = self.around.array.exclude if self.around.array else ()
        if self.geometry is None or self.weights is None:
            return
        left = sum(w for c, w in zip(self.geometry.channels, self.weights, strict=True) if c not in exclude)
        if not left > 0:
            self.table.notes.problem(
                f"{self.table.where}.shading",
                "the hydrophones that array.exclude leaves all have weight 0; choose another",
            )

    def _why_not_pairs(self) -> str | None:
        calibration = self.around.calibration
        if self.geometry is None or self.weights is None or calibration is None:
            return None
        return why_not_pairs(self.geometry, self.weights, [calibration.delay_s[c] for c in self.geometry.channels])

    def _beams(self, kernel: str | None) -> int | None:
        why = self._why_not_pairs()
        if kernel == "pairs" and why is not None:
            self.table.got("kernel", f'"pairs" cannot be used here: {why}; must be "auto" or "general"')
        beams = self.table.integer("beams", 145, f"must be a whole number from 2 to {MAX_BEAMS}", low=2, high=MAX_BEAMS)
        if beams is None or self.bins is None or self.geometry is None:
            return beams
        pairs = why is None and kernel != "general"
        size = weight_bytes(len(self.geometry.channels), beams, self.bins, pairs)
        if size > MAX_WEIGHT_BYTES:
            most = max(2, beams * MAX_WEIGHT_BYTES // size)
            self.table.got(
                "beams", f"takes {size / 2**30:.1f} GiB of steering weights; must be at most {most} here (4 GiB)"
            )
            return None
        return beams

    def _published(self, frame: int | None, beams: int | None) -> tuple[float | None, int | None, int | None]:
        rate = self.around.rate_hz
        table, fastest = self.table, None if frame is None or rate is None else 2 * rate / frame
        most = "" if fastest is None else f", at most {fastest:g} (one for each half frame)"
        map_rate = table.number("map_rate_hz", None, f"must be a number of Hz above 0{most}", above=0, high=fastest)
        top_beams, top_bins = beams or MAX_BEAMS, self.bins or MAX_FRAME
        map_beams = table.integer("map_beams", None, f"must be from 2 to {top_beams} (beams)", low=2, high=top_beams)
        map_bins = table.integer(
            "map_bins", None, f"must be from 1 to {top_bins} (bins in the band)", low=1, high=top_bins
        )
        return map_rate, map_beams, map_bins

    def _warn(self, frame: int) -> None:
        taps = self._taps()
        if taps is not None and taps / frame > WARN_TAP_SHARE:
            self.table.notes.warning(
                f"{self.table.where}.frame",
                f"{frame} is short for this array: P/N is {taps / frame:.2f}, wrap in the map above -69 dB re one "
                f"hydrophone; {next_frame(4 * taps)} or more brings it under {WARN_TAP_SHARE}",
            )


def _chosen(value: Any, count: int) -> tuple[int, ...] | None:
    """The channels a slice or list chooses out of `count`, or None where it is not one, or is out of range."""
    if isinstance(value, str):
        parts = re.fullmatch(r"\s*([0-9]{0,9})\s*:\s*([0-9]{0,9})\s*(?::\s*([0-9]{0,9})\s*)?", value)
        if not parts:
            return None
        first, stop, step = int(parts[1] or 0), int(parts[2] or count), int(parts[3] or 1)
        value = list(range(first, stop, step)) if stop <= count and step > 0 else []
    if not isinstance(value, list) or not all(is_integer(channel) and 0 <= channel < count for channel in value):
        return None
    return tuple(value) if len(value) == len(set(value)) >= 2 else None
