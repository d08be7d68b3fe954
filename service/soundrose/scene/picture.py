"""core: a frequency-bearing map as coloured blocks of text, with its axes, for a terminal.

Colours rise evenly in lightness from dark blue to yellow and are told apart with colour-blind eyes: sixteen
steps of the map published as cividis (Nuñez, Anderton, Renslow, 2018, doi:10.1371/journal.pone.0199239).
"""

from collections.abc import Sequence
from typing import Final

import numpy as np
from numpy.typing import NDArray
from rich.style import Style
from rich.text import Text

from soundrose.errors import UsageError
from soundrose.product.reduce import ReducedMap, reduce_levels

__all__ = ["ANCHORS", "SPAN_DB", "colour", "map_picture", "scale_line"]

ANCHORS: Final = (
    (0, 34, 78), (0, 40, 91), (0, 46, 106), (5, 51, 113), (26, 56, 111), (39, 62, 110),
    (50, 67, 109), (59, 73, 108), (67, 78, 108), (75, 84, 108), (83, 90, 109), (90, 95, 110),
    (97, 101, 111), (104, 106, 113), (111, 112, 115), (118, 118, 118), (125, 124, 120), (132, 130, 121),
    (140, 136, 120), (147, 142, 120), (155, 148, 118), (163, 154, 116), (171, 160, 114), (180, 167, 111),
    (188, 174, 108), (196, 180, 104), (205, 187, 99), (213, 194, 94), (222, 201, 88), (231, 209, 80),
    (240, 216, 70), (249, 224, 58), (254, 232, 56),
)  # fmt: skip
SPAN_DB: Final = 40.0  # from the lowest colour to the highest: side lobes and images show, the floor does not
MARGIN: Final = 8  # characters left of the picture: "1234 Hz "
TICKS_DEG: Final = (0, 90, 180, 60, 120, 30, 150, 75, 105, 45, 135)  # the most wanted first
AXES: Final = "frequency upwards, cone angle along: 0° forward, 90° broadside, 180° aft"
UNIT: Final = "dB re 1 µPa²/Hz"


def colour(share: float) -> tuple[int, int, int]:
    """Red, green, blue 0 to 255 for `share` 0 (lowest) to 1 (highest); beyond is as at the end."""
    place = min(max(share, 0.0), 1.0) * (len(ANCHORS) - 1)
    lower = min(int(place), len(ANCHORS) - 2)
    rest = place - lower
    mixed = [round(a + rest * (b - a)) for a, b in zip(ANCHORS[lower], ANCHORS[lower + 1], strict=True)]
    return mixed[0], mixed[1], mixed[2]


def map_picture(
    level_db: NDArray[np.float32], cone_deg: Sequence[float], f0_hz: float, df_hz: float, *, width: int, height: int
) -> Text:
    """Rows of half blocks, frequency upwards, cone angle along, the axis of degrees and the scale below.

    Parameters
    ----------
    level_db : (beams, bins), dB re 1 µPa²/Hz.  width, height : characters in all, at least 30 and 6.

    Raises
    ------
    UsageError : no room for a picture.
    """
    if width < 30 or height < 6:
        raise UsageError(f"{width} x {height} characters are too few for a map; at least 30 x 6")
    reduced = reduce_levels(level_db, cone_deg, f0_hz, df_hz, bins=2 * (height - 3), beams=width - MARGIN)
    top_db = 5 * np.ceil(float(reduced.values.max()) / 5)
    text = Text(f"{'':{MARGIN}}{AXES[: width - MARGIN]}\n", no_wrap=True)
    rows = -(-reduced.values.shape[1] // 2)
    for row in reversed(range(rows)):
        text.append(_frequency_label(reduced, 2 * row, rows))
        _append_row(text, reduced.values, 2 * row, top_db)
        text.append("\n")
    text.append(_degree_axis(reduced.cone_deg))
    text.append("\n")
    text.append_text(scale_line(float(top_db), width))
    return text


def _append_row(text: Text, values: NDArray[np.float32], lower: int, top_db: float) -> None:
    """One line of characters: the upper half shows bin lower + 1, the lower half bin lower."""
    upper = min(lower + 1, values.shape[1] - 1)
    for beam in range(values.shape[0]):
        shares = [float(1 + (values[beam, row] - top_db) / SPAN_DB) for row in (upper, lower)]
        text.append("▀", Style.parse("{} on {}".format(*(_name(colour(share)) for share in shares))))


def _name(rgb: tuple[int, int, int]) -> str:
    return "#{:02x}{:02x}{:02x}".format(*rgb)


def _frequency_label(reduced: ReducedMap, lower: int, rows: int) -> str:
    """Frequency in the middle of a row of characters, on every third row and on the lowest and highest."""
    row = lower // 2
    if row % 3 and row != rows - 1:
        return " " * MARGIN
    bins = min(2, reduced.values.shape[1] - lower)
    return f"{reduced.f0_hz + reduced.df_hz * (lower + (bins - 1) / 2):4.0f} Hz "


def _degree_axis(cone_deg: Sequence[float]) -> str:
    """Cone angles under their beams; one that would touch another already there is left out."""
    line = [" "] * (MARGIN + len(cone_deg) + 4)
    for tick in TICKS_DEG:
        beam = int(np.argmin(np.abs(np.cos(np.deg2rad(cone_deg)) - np.cos(np.deg2rad(tick)))))
        label = f"{tick}°"
        begin = MARGIN + beam - len(label) // 2
        if not "".join(line[begin - 1 : begin + len(label) + 1]).strip():
            line[begin : begin + len(label)] = label
    return "".join(line).rstrip()


def scale_line(top_db: float, width: int) -> Text:
    """The colours with their levels at both ends."""
    low, high = f"{top_db - SPAN_DB:.0f} ", f" {top_db:.0f} {UNIT}"
    steps = max(8, min(40, width - MARGIN - len(low) - len(high)))
    text = Text(low.rjust(MARGIN), no_wrap=True)
    for step in range(steps):
        text.append("█", Style.parse(_name(colour(step / (steps - 1)))))
    text.append(high)
    return text
