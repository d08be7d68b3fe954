"""core: the labelled picture of a map: frequency across, cone angle down, level as colour; PNG bytes."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from io import BytesIO
from math import ceil, floor, log10
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from soundrose.product.reduce import ReducedMap
from soundrose.serve.lettering import Lettering
from soundrose.serve.palette import PALETTE, coloured

__all__ = ["LARGEST", "SMALLEST", "Marks", "Picture", "draw_map", "level_range", "plot_size"]

SMALLEST = (480, 320)
LARGEST = (2400, 1600)
_LEFT, _RIGHT, _TOP, _BOTTOM = 66, 104, 60, 92
_INK, _PAPER, _FRAME, _WARN = (28, 30, 34), (250, 250, 248), (110, 114, 120), (120, 40, 110)
_LIGHT, _DARK = (255, 255, 255), (0, 0, 0)
_BAR = 16
_DASH, _BREAK = 8.0, 5.0
_NARROW = 800  #: pixels of width below which the time has a line of its own
_ONSET = ("alias onset: images from here on", "alias onset")
_SPAN_DB = 20.0  #: the least a scale covers: less would show noise as contrast


@dataclass(frozen=True, slots=True)
class Marks:
    """What is drawn over the map. half_width : half-power half width in cosine times Hz, None where there is none;
    onset : alias onset of the broadside beam, Hz, None without equal spacing."""

    half_width: float | None
    onset: float | None


@dataclass(frozen=True, slots=True, eq=False)
class Picture:
    """made : the map, already reduced to what fits.  header : the published keys.  times : (from, to) as text.
    notes : what must be known to read it right, in few words.  scale : (low, high) dB, low < high."""

    made: ReducedMap
    header: Mapping[str, Any]
    times: tuple[str, str]
    notes: Sequence[str]
    marks: Marks
    scale: tuple[float, float]
    width: int
    height: int


def plot_size(width: int, height: int) -> tuple[int, int]:
    """(columns, rows) of pixels of the map itself in a picture of that size."""
    return width - _LEFT - _RIGHT, height - _TOP - _BOTTOM


def level_range(values: NDArray[np.float32], low: float | None, high: float | None) -> tuple[float, float]:
    """(low, high) of the scale: as asked, or on whole 5 dB from the 2nd percentile to the largest level."""
    floor_db, top_db = float(np.percentile(values, 2)), float(values.max())
    top = 5.0 * ceil(top_db / 5) if high is None else high
    if low is None:
        low = min(5.0 * floor(floor_db / 5), top - _SPAN_DB)
        low = max(low, top - 120.0)
    return (low, top) if top > low else (low, low + _SPAN_DB)


def draw_map(picture: Picture) -> bytes:
    """PNG, 8 bits per colour, `width` x `height` pixels. Which pixel is which frequency and angle: `_Axes`."""
    image = Image.new("RGB", (picture.width, picture.height), _PAPER)
    axes = _Axes(picture)
    colours = coloured(picture.made.values[axes.beam_rows][:, axes.bin_columns], *picture.scale)
    image.paste(Image.fromarray(colours), (_LEFT, _TOP))
    draw = ImageDraw.Draw(image)
    text = Lettering(draw, _INK)
    _draw_axes(draw, text, axes)
    _draw_marks(draw, text, axes, picture.marks)
    _draw_scale(image, draw, text, axes, picture)
    _draw_words(text, axes, picture)
    out = BytesIO()
    image.save(out, "PNG", compress_level=3)
    return out.getvalue()


class _Axes:
    """Where what is drawn. Frequency is linear across, each bin as wide as the next; the cone angle linear down, 0 deg
    (forward) on top; each pixel shows the bin it lies in and the beam nearest in cosine."""

    def __init__(self, picture: Picture) -> None:
        made = picture.made
        self.columns, self.rows = plot_size(picture.width, picture.height)
        self.low_hz = made.f0_hz - made.df_hz / 2
        self.high_hz = self.low_hz + made.df_hz * made.values.shape[1]
        bins = (np.arange(self.columns) + 0.5) / self.columns * made.values.shape[1]
        self.bin_columns = np.minimum(bins.astype(int), made.values.shape[1] - 1)
        rising = -np.cos(np.radians(made.cone_deg))
        between = (rising[1:] + rising[:-1]) / 2
        rows = -np.cos(np.pi * (np.arange(self.rows) + 0.5) / self.rows)
        self.beam_rows = np.searchsorted(between, rows)

    def x(self, f_hz: float) -> float:
        return float(_LEFT + (f_hz - self.low_hz) / (self.high_hz - self.low_hz) * self.columns)

    def y(self, cone_deg: float) -> float:
        return _TOP + cone_deg / 180 * self.rows

    def frequencies(self) -> NDArray[np.float64]:
        """Of every column's middle, Hz."""
        step = (self.high_hz - self.low_hz) / self.columns
        middles: NDArray[np.float64] = self.low_hz + step * (np.arange(self.columns) + 0.5)
        return middles


def _draw_axes(draw: ImageDraw.ImageDraw, text: Lettering, axes: _Axes) -> None:
    right, bottom = _LEFT + axes.columns, _TOP + axes.rows
    draw.rectangle((_LEFT - 1, _TOP - 1, right, bottom), outline=_FRAME)
    for f in _ticks(axes.low_hz, axes.high_hz, max(3, axes.columns // 80)):
        draw.line((axes.x(f), bottom, axes.x(f), bottom + 5), fill=_INK)
        text.put(axes.x(f), bottom + 8, f"{f:g}", across=0.5)
    for angle in range(0, 181, 15 if axes.rows > 300 else 30):
        draw.line((_LEFT - 6, axes.y(angle), _LEFT - 1, axes.y(angle)), fill=_INK)
        text.put(_LEFT - 9, axes.y(angle), f"{angle}", across=1, down=0.5)
    text.put(_LEFT + axes.columns / 2, bottom + 25, "Frequency (Hz)", across=0.5)
    text.put(8, _TOP - 20, "Cone angle (°)")
    text.put(_LEFT + 4, axes.y(0) + 3, "forward", colour=_LIGHT, halo=_DARK)
    text.put(_LEFT + 4, axes.y(180) - 4, "aft", down=1, colour=_LIGHT, halo=_DARK)


def _draw_marks(draw: ImageDraw.ImageDraw, text: Lettering, axes: _Axes, marks: Marks) -> None:
    """The half-power width of the broadside beam as a funnel about 90 deg; the alias onset of every beam as a curve."""
    frequencies = axes.frequencies()
    if marks.half_width is not None:
        with np.errstate(divide="ignore"):
            half = np.where(frequencies > 0, marks.half_width / frequencies, np.inf)
        seen = half < 1
        for side in (-1, 1):
            ys = axes.y(0) + np.degrees(np.arccos(side * half[seen])) / 180 * axes.rows
            _dashes(draw, _LEFT + np.flatnonzero(seen), ys)
        if seen.any():
            first = int(np.flatnonzero(seen)[min(len(np.flatnonzero(seen)) // 8, 60)])
            y = axes.y(0) + np.degrees(np.arccos(half[first])) / 180 * axes.rows
            text.put(_LEFT + first + 6, y - 3, "half-power width at 90°", down=1, colour=_LIGHT, halo=_DARK)
    if marks.onset is not None:
        rows = np.arange(axes.rows)
        onset = marks.onset / (1 + np.abs(np.cos(np.pi * (rows + 0.5) / axes.rows)))
        seen = (onset > axes.low_hz) & (onset < axes.high_hz)
        xs = _LEFT + (onset[seen] - axes.low_hz) / (axes.high_hz - axes.low_hz) * axes.columns
        _dashes(draw, xs, _TOP + rows[seen])
        if seen.any():
            at = int(seen.sum()) // 6
            room = _LEFT + axes.columns - xs[at] - 12
            label = next((words for words in _ONSET if text.width(words) < room), _ONSET[-1])
            inside = text.width(label) < room
            text.put(
                xs[at] + (8 if inside else -8), _TOP + rows[seen][at], label,
                across=0 if inside else 1, colour=_LIGHT, halo=_DARK,
            )  # fmt: skip


def _dashes(draw: ImageDraw.ImageDraw, xs: NDArray[Any], ys: NDArray[Any]) -> None:
    """A dashed curve that shows on any colour: white upon black; dashes are equally long all along it."""
    if len(xs) < 2:
        return
    along = np.concatenate([[0.0], np.cumsum(np.hypot(np.diff(xs), np.diff(ys)))])
    for start in np.arange(0.0, along[-1], _DASH + _BREAK):
        marks = np.linspace(start, min(start + _DASH, along[-1]), 5)
        points = list(zip(np.interp(marks, along, xs).tolist(), np.interp(marks, along, ys).tolist(), strict=True))
        draw.line(points, fill=_DARK, width=3)
        draw.line(points, fill=_LIGHT, width=1)


def _draw_scale(
    image: Image.Image, draw: ImageDraw.ImageDraw, text: Lettering, axes: _Axes, picture: Picture
) -> None:  # fmt: skip
    """The colours beside their levels, with the unit."""
    left, (low, high) = _LEFT + axes.columns + 22, picture.scale
    ramp = PALETTE[np.rint(np.linspace(255, 0, axes.rows)).astype(int)]
    image.paste(Image.fromarray(np.repeat(ramp[:, None], _BAR, axis=1)), (left, _TOP))
    draw.rectangle((left - 1, _TOP - 1, left + _BAR, _TOP + axes.rows), outline=_FRAME)
    for level in _ticks(low, high, max(3, axes.rows // 60)):
        y = _TOP + (high - level) / (high - low) * axes.rows
        draw.line((left + _BAR + 1, y, left + _BAR + 5, y), fill=_INK)
        text.put(left + _BAR + 8, y, f"{level:g}", down=0.5)
    text.put(picture.width - 8, _TOP - 20, str(picture.header["unit"]), across=1)


def _draw_words(text: Lettering, axes: _Axes, picture: Picture) -> None:
    """What it is, of when, and what must be known to read it right."""
    header, narrow = picture.header, picture.width < _NARROW
    span = header["span_s"]
    averaged = f"average over {span:g} s" if span else "one frame"
    when = f"{picture.times[0]} to {picture.times[1]}, {averaged}"
    text.put(8 if narrow else _LEFT, 4 if narrow else 10, f"Array {header['array']}, band {header['band']}", size=16)
    if narrow:
        text.put(8, 23, when, size=12)
    else:
        text.put(picture.width - 8, 12, when, across=1)
    level = "Spectral density level, plane-wave equivalent"
    if not narrow:
        level += f", {header['unit']}; diffuse noise reads lower by the array gain"
    left, y = 8 if narrow else _LEFT, _TOP + axes.rows + 44
    text.put(left, y, level)
    for line in _wrapped(text, picture.notes, picture.width - left - 8)[:2]:
        y += 16
        text.put(left, y, line, colour=_WARN, bold=True)


def _wrapped(text: Lettering, notes: Sequence[str], width: float) -> list[str]:
    """Notes joined to lines no wider than `width`; a note is never cut."""
    lines: list[str] = []
    for note in notes:
        if lines and text.width(f"{lines[-1]}; {note}") + 2 < width:
            lines[-1] = f"{lines[-1]}; {note}"
        else:
            lines.append(note)
    return lines


def _ticks(low: float, high: float, most: int) -> list[float]:
    """Round values in [low, high], at most about `most`."""
    rough = (high - low) / max(1, most)
    step = 10.0 ** floor(log10(rough))
    step = next(step * m for m in (1, 2, 5, 10) if step * m >= rough * (1 - 1e-9))
    return [round(step * k, 9) for k in range(ceil(low / step - 1e-9), floor(high / step + 1e-9) + 1)]
