"""core: raw blocks of any type and layout to float32 micropascal, with clipping counted and misreadings found.

Pressure = value * full_scale_v * 10^(-(sensitivity_db + gain_db) / 20) micropascal, where value is the integer over
2^(bits-1), or the float itself; floats in volts leave out the full scale, floats in micropascal stand as they are.
A block is opened once and written out piecewise, straight into the hops it belongs to: there is no copy in between.
"""

from dataclasses import dataclass
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from soundrose.errors import UsageError
from soundrose.feed.wire import Samples
from soundrose.settings_types import CalibrationSettings

__all__ = ["CLIPPED_AT", "PRESSURE_LIMIT", "Calibration", "RawBlock"]

CLIPPED_AT: Final = 1.0 - 2.0**-15  #: a value at or over this share of full scale is clipped

#: Micropascal, 280 dB: no sound in water is as loud. A float beyond it is a misreading like NaN, and its square
#: summed over a frame would leave the range of float32.
PRESSURE_LIMIT: Final = 1e14


@dataclass(frozen=True, slots=True, eq=False)
class _Format:
    """scale : (channels, 1) float32, micropascal per raw unit.  limit : (channels,) float64, largest raw value that
    is taken (None: integers, all are).  clip : raw value at which clipping begins (None: not judged)."""

    scale: NDArray[np.float32]
    limit: NDArray[np.float64] | None
    clip: float | int | None


@dataclass(frozen=True, slots=True, eq=False)
class RawBlock:
    """An opened block. values : (channels, samples), int16, int32 or float32, a view of the message (24-bit integers
    stand in the upper three bytes of int32).  bad : (channels,) bool, hydrophones misread in it; None: none."""

    values: NDArray[Any]
    format: _Format
    bad: NDArray[np.bool_] | None


class Calibration:
    """Turns raw blocks of one array into micropascal.

    Raises
    ------
    UsageError
        if a channel's scale does not fit float32.
    """

    def __init__(self, settings: CalibrationSettings) -> None:
        gain_db = np.add(settings.sensitivity_db, settings.gain_db, dtype=np.float64)
        with np.errstate(over="ignore"):
            volt = 10.0 ** (-gain_db / 20.0)
            full = volt * np.asarray(settings.full_scale_v, dtype=np.float64)
        top = 2**31
        self._formats = {
            ("i2", "count"): _integers(full / 2**15, 2**15 - 1),
            ("i3", "count"): _integers(full / top, top - 2**16),  # times 256 each: read from the upper three bytes
            ("i4", "count"): _integers(full / top, top - 2**16),
            ("f4", "count"): _floats(full, CLIPPED_AT),
            ("f4", "V"): _floats(volt, None),
            ("f4", "uPa"): _floats(np.ones_like(full), None),
        }

    def open(self, message: Samples, skip: int = 0) -> RawBlock:
        """The block without its first `skip` samples, judged and ready to be written out."""
        by_channel = message.layout == "channel"
        rows, columns = (message.channels, message.samples) if by_channel else (message.samples, message.channels)
        if message.type == "i3":
            values: NDArray[Any] = _widened(message.data, rows, columns)
        else:
            values = np.frombuffer(message.data, _DTYPES[message.type]).reshape(rows, columns)
        if not by_channel:
            values = values.T
        if skip:
            values = values[:, skip:]
        form = self._formats[message.type, message.unit]
        bad = None if form.limit is None else _misread(values, form.limit)
        return RawBlock(values, form, bad)

    def write(
        self, block: RawBlock, start: int, stop: int, out: NDArray[np.float32], clipped: NDArray[np.int32]
    ) -> None:
        """Write samples start..stop as micropascal to `out` (channels, stop - start); add to `clipped` (channels,)."""
        values = block.values if stop - start == block.values.shape[1] else block.values[:, start:stop]
        if block.bad is not None:
            values = np.where(block.bad[:, None], np.float32(0.0), values)
        np.multiply(values, block.format.scale, out=out, dtype=np.float32, casting="same_kind")
        clip = block.format.clip
        if clip is not None and (values.max() >= clip or values.min() <= -clip):
            clipped += np.count_nonzero((values >= clip) | (values <= -clip), axis=1).astype(np.int32)


_DTYPES: Final[dict[str, np.dtype[Any]]] = {"i2": np.dtype("<i2"), "i4": np.dtype("<i4"), "f4": np.dtype("<f4")}


def _integers(scale: NDArray[np.float64], clip: int) -> _Format:
    return _Format(_single(scale), None, clip)


def _floats(scale: NDArray[np.float64], clip: float | None) -> _Format:
    return _Format(_single(scale), PRESSURE_LIMIT / scale, clip)


def _single(scale: NDArray[np.float64]) -> NDArray[np.float32]:
    with np.errstate(over="ignore", under="ignore"):
        single = scale.astype(np.float32)
    for channel in np.flatnonzero(~np.isfinite(single) | (single <= 0)):
        raise UsageError(
            f"calibration of channel {channel}: {scale[channel]:g} micropascal per unit does not fit float32; "
            "check sensitivity_db, gain_db and full_scale_v"
        )
    return single[:, None]


def _widened(data: bytes | memoryview, rows: int, columns: int) -> NDArray[np.int32]:
    """Packed 24-bit integers as int32, 256 times as large: the sign is right without a shift."""
    wide = np.zeros((rows, columns), dtype="<i4")
    wide.view(np.uint8).reshape(rows, columns, 4)[..., 1:] = np.frombuffer(data, np.uint8).reshape(rows, columns, 3)
    return wide


def _misread(values: NDArray[np.float32], limit: NDArray[np.float64]) -> NDArray[np.bool_] | None:
    """Channels with NaN, infinity or a value beyond `limit`; None if there is none."""
    with np.errstate(invalid="ignore"):  # signalling NaN
        peak = np.maximum(values.max(axis=1), -values.min(axis=1))  # NaN wins in both
        fit = peak <= limit
    return None if fit.all() else ~fit
