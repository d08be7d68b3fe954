"""process: `soundrose check FILE`: what the configured array can and cannot do, as tables in a terminal."""

from collections.abc import Sequence
from dataclasses import dataclass
from math import cos, isclose, radians
from pathlib import Path

import numpy as np
from rich import box
from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from soundrose.array.budget import Budget, band_budget, bin_range, why_not_pairs
from soundrose.array.filters import max_delay_samples, tap_count
from soundrose.array.geometry import Geometry, band_geometry
from soundrose.array.limits import MAX_BEARING_WIDTH, Line, alias_onset_hz, line_of
from soundrose.array.shading import shading_weights
from soundrose.errors import ConfigError
from soundrose.settings import load_settings
from soundrose.settings_types import BandSettings, Settings

__all__ = ["CAUTIONS", "check_file", "check_report", "check_warnings"]

CAUTIONS = (
    "Not a navigation or collision-avoidance aid. Absence of detection is not absence of an animal or a vessel. "
    "Decisions on mitigation are for qualified observers under the permit and local rules in force. Levels are as "
    "good as the calibration entered. A line cannot tell port from starboard."
)
#: scalloping loss beyond which there are too few beams, dB
MOST_SCALLOPING_DB = 0.5
#: y or z offsets beyond this share of the wavelength at the band's top are felt: beams steer along x alone
OFFSET_SHARE = 1 / 8
#: estimated share of a quiet core beyond which a band may fall behind on a busy one
MOST_LOAD = 0.5
CONE_ANGLES_DEG = (90, 60, 45, 30, 0)
FREQUENCIES = 6
HANN_NOISE_BANDWIDTH = 1.5


@dataclass(frozen=True, slots=True, eq=False)
class _Facts:
    """What the tables of one band are made of."""

    band: BandSettings
    geometry: Geometry
    line: Line
    rate_hz: float
    bins: int
    taps: int
    general_why: str | None
    budget: Budget

    @property
    def df_hz(self) -> float:
        return self.rate_hz / self.band.frame

    @property
    def frequencies_hz(self) -> list[float]:
        """The band's edges and some between, about evenly spaced in ratio; from the first bin above 0 Hz."""
        low, high = self.band.band_hz
        low = max(low, min(self.df_hz, high / 2))
        between = (float(f"{f:.2g}") for f in np.geomspace(low, high, FREQUENCIES)[1:-1])
        return [low, *(f for f in dict.fromkeys(between) if low < f < high), high]


def check_file(path: str | Path, console: Console, errors: Console | None = None) -> int:
    """Print the report of a settings file on `console`, or a line for each mistake on `errors` (standard error).

    Returns the exit status: 0, or 2 where there are mistakes.
    """
    try:
        settings = load_settings(path)
    except ConfigError as error:
        for line in error.problems:
            (errors or Console(stderr=True)).print(line, soft_wrap=True, markup=False, highlight=False, emoji=False)
        return 2
    console.print(check_report(settings), highlight=False)
    return 0


def check_report(settings: Settings) -> Group:
    """The tables: the array, then each band, then warnings and cautions."""
    parts: list[RenderableType] = [_array_table(settings)]
    for facts in (_facts(settings, band) for band in settings.bands):
        parts += [Text(""), _band_table(facts), Text(""), _frequency_table(facts), Text(""), _alias_table(facts)]
    warnings = check_warnings(settings)
    parts.append(Text(f"\nWarnings: {len(warnings)}" if warnings else "\nNo warnings."))
    parts += [Padding(_hanging("!", warning), (0, 0, 0, 1)) for warning in warnings]
    parts.append(Text("\n" + CAUTIONS))
    return Group(*parts)


def check_warnings(settings: Settings) -> tuple[str, ...]:
    """What is allowed but unlikely to be meant: found while reading the file, and from the array's limits."""
    lines = list(settings.warnings)
    for band in settings.bands:
        lines += [f"band {band.name}: {text}" for text in _band_warnings(settings, _facts(settings, band))]
    return tuple(lines)


def _facts(settings: Settings, band: BandSettings) -> _Facts:
    geometry, rate = band_geometry(settings, band), settings.feed.rate_hz
    skews = [settings.calibration.delay_s[channel] for channel in band.channels]
    why = why_not_pairs(geometry, shading_weights(band.shading, geometry, band.shading_db), skews)
    why = "the settings say so" if band.kernel == "general" else why
    first, stop = bin_range(band.band_hz, band.frame, rate)
    taps = tap_count(max_delay_samples(geometry, settings.water.sound_speed_m_s, rate, skews))
    budget = band_budget(len(band.channels), band.beams, stop - first, band.frame, rate, why is None)
    return _Facts(band, geometry, line_of(settings, band), rate, stop - first, taps, why, budget)


def _band_warnings(settings: Settings, facts: _Facts) -> list[str]:
    band, line, top, lines = facts.band, facts.line, facts.band.band_hz[1], []
    loss = line.scalloping_db(top, band.beams)
    if loss > MOST_SCALLOPING_DB:
        lines.append(
            f"{band.beams} beams are few: between two of them {loss:.1f} dB are lost at {top:g} Hz (scalloping); "
            f"{line.beams_for(top, MOST_SCALLOPING_DB)} or more keep it under {MOST_SCALLOPING_DB} dB"
        )
    silent = [c for c, w in zip(band.channels, line.weights, strict=True) if w == 0 and c not in settings.array.exclude]
    if silent:
        lines.append(
            f"the shading gives hydrophones {_listed(silent)} no weight; hamming, chebyshev and taylor use them"
        )
    wavelength = line.sound_speed_m_s / top
    if facts.geometry.offset_m > wavelength * OFFSET_SHARE:
        lines.append(
            f"hydrophones are up to {facts.geometry.offset_m:.3g} m off the straight line, over 1/8 wavelength at "
            f"{top:g} Hz: beams steer along x alone and lose level and side lobes there"
        )
    if facts.budget.load > MOST_LOAD:
        lines.append(
            f"the estimated load is {facts.budget.load:.2f} of one core: fewer beams or less band, or measure it"
        )
    return lines


def _array_table(settings: Settings) -> Table:
    table = _facts_table(f"Array {settings.array.id}")
    channels, out = settings.array.channels, settings.array.exclude
    table.add_row("hydrophones", f"{channels}" + (f", of which left out: {_listed(out)}" if out else ""))
    x = np.array(settings.array.positions_m)[:, 0]
    spacing = f", equal spacing {settings.array.spacing_m:g} m" if settings.array.spacing_m else ""
    table.add_row("length", f"{np.ptp(x):g} m along x{spacing}")
    table.add_row("sound speed", f"{settings.water.sound_speed_m_s:.1f} m/s, {settings.water.source}")
    table.add_row("transit time", f"{_seconds(float(np.ptp(x)) / settings.water.sound_speed_m_s)} from end to end")
    table.add_row("sampling rate", f"{settings.feed.rate_hz:g} Hz, overload: {settings.feed.overload}")
    table.add_row("heard", f"{_heard(settings)}; nothing above {max(b.band_hz[1] for b in settings.bands):g} Hz")
    return table


def _heard(settings: Settings) -> str:
    """The stretches of frequency that some band covers."""
    stretches: list[list[float]] = []
    for low, high in sorted(band.band_hz for band in settings.bands):
        if stretches and low <= stretches[-1][1]:
            stretches[-1][1] = max(stretches[-1][1], high)
        else:
            stretches.append([low, high])
    return ", ".join(f"{low:g}-{high:g} Hz" for low, high in stretches)


def _band_table(facts: _Facts) -> Table:
    band, line, budget = facts.band, facts.line, facts.budget
    table = _facts_table(f"Band {band.name}")
    share = line.transit_s * facts.rate_hz / band.frame
    used = int(np.count_nonzero(line.weights))
    table.add_row("heard", f"{band.band_hz[0]:g}-{band.band_hz[1]:g} Hz; sounds outside are not heard in this band")
    spacing = "spacing not equal" if line.spacing_m is None else f"spacing {line.spacing_m:g} m"
    table.add_row("line", f"{len(band.channels)} hydrophones, {used} with weight, {line.length_m:g} m, {spacing}")
    table.add_row("transit time", f"{_seconds(line.transit_s)}, {share:.3f} of a frame")
    table.add_row("shading", _shading(facts))
    table.add_row("noise gain", f"{line.white_gain_db():.1f} dB against noise independent at each hydrophone")
    table.add_row("beams", f"{band.beams}, evenly spaced in cosine; {_scalloping(facts)}")
    noise = HANN_NOISE_BANDWIDTH * facts.df_hz
    table.add_row("frequency", f"{facts.bins} bins {facts.df_hz:.4g} Hz apart, noise bandwidth {noise:.4g} Hz (Hann)")
    interval = band.frame / 2 / facts.rate_hz
    averages = f"averaged over {band.average_s:g} s" if band.average_s else "each frame by itself"
    table.add_row("time", f"frame {_seconds(2 * interval)}, a new map each {_seconds(interval)}, {averages}")
    table.add_row("filters", f"P = {facts.taps} taps, P/N = {facts.taps / band.frame:.3f}")
    table.add_row("kernel", "pairs" if facts.general_why is None else f"general: {facts.general_why}")
    load = f"about {budget.load:.2f}" if budget.load >= 0.01 else "under 0.01"
    memory = f"weights {_bytes(budget.weight_bytes)}, buffers {_bytes(budget.buffer_bytes)}"
    table.add_row("memory", f"about {memory}, besides about 80 MB of the process itself")
    table.add_row("load", f"{load} of a quiet core: an estimate from operation counts")
    return table


def _shading(facts: _Facts) -> str:
    band, line = facts.band, facts.line
    name = band.shading if isinstance(band.shading, str) else "own weights"
    takes_db = f", {band.shading_db:g} dB asked" if name in ("chebyshev", "taylor") else ""
    reach = 2 * band.band_hz[1] / line.sound_speed_m_s
    lobe = line.side_lobe_db(min(reach, 0.5 / line.spacing_m) if line.spacing_m else reach)
    return f"{name}{takes_db}; highest side lobe " + ("none" if lobe is None else f"{lobe:.1f} dB")


def _scalloping(facts: _Facts) -> str:
    top = facts.band.band_hz[1]
    return f"between two of them {facts.line.scalloping_db(top, facts.band.beams):.2f} dB lost at {top:g} Hz"


def _frequency_table(facts: _Facts) -> RenderableType:
    """Per frequency: half-power width and gain, and where the far field begins."""
    line, slant = facts.line, cos(radians(30))
    columns = ("frequency", "width 90°", "width 30°", "gain 90°", "gain 30°", "far field 90°")
    table = _numbers_table(columns, ("Hz", "degrees", "degrees", "dB", "dB", "m"))
    for f in facts.frequencies_hz:
        table.add_row(
            f"{f:.4g}", _width(line, f, 0.0), _width(line, f, slant), f"{line.array_gain_db(f, 0.0):.1f}",
            f"{line.array_gain_db(f, slant):.1f}", f"{line.far_field_m(f, 0.0):.0f}",
        )  # fmt: skip
    note = (
        "90° is broadside, 30° is 30° off endfire (cone angles). Width: half power, in brackets where it is too wide "
        "for a bearing. Gain: over one hydrophone, in isotropic noise. Far field: (L·sinθ)²/λ."
    )
    return Group(table, Text(note))


def _width(line: Line, f_hz: float, beam_cos: float) -> str:
    """The half-power width; in brackets where it is so wide that a sound is heard but gets no bearing."""
    width, half = line.beamwidth_deg(f_hz, beam_cos), line.half_width_cos(f_hz)
    if width is None or half is None:
        return "(all round)"
    text = f"{width:.2f}" if width < 10 else f"{width:.1f}"
    return f"({text})" if 2 * half > MAX_BEARING_WIDTH else text


def _alias_table(facts: _Facts) -> RenderableType:
    """Per cone angle: from which frequency a beam has images."""
    line, top = facts.line, facts.band.band_hz[1]
    if line.spacing_m is None:
        return Text("Alias onset: none by itself, the spacing is not equal; high side lobes take the place of images.")
    table = _numbers_table(("cone angle", "alias onset", "free of images"), ("degrees", "Hz", "share of the band"))
    low = facts.band.band_hz[0]
    for angle in CONE_ANGLES_DEG:
        onset = alias_onset_hz(line.spacing_m, line.sound_speed_m_s, cos(radians(angle)))
        free = min(1.0, max(0.0, (onset - low) / (top - low)))
        whole = onset >= top or isclose(onset, top)
        table.add_row(_both_sides(angle), f"{onset:.5g}", "all" if whole else f"{100 * free:.0f} %")
    return Group(table, Text("From its alias onset on, a beam hears a second direction as loudly as its own."))


def _both_sides(angle: int) -> str:
    return f"{angle}" if angle == 90 else f"{angle}, {180 - angle}"


def _facts_table(title: str) -> Table:
    table = Table(title=title, title_justify="left", title_style="bold", box=None, show_header=False, pad_edge=False)
    table.add_column(no_wrap=True, width=13)
    table.add_column(overflow="fold")
    return table


def _numbers_table(columns: Sequence[str], units: Sequence[str]) -> Table:
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False, padding=(0, 1, 0, 0), show_edge=False)
    for column, unit in zip(columns, units, strict=True):
        table.add_column(f"{column}\n{unit}", justify="right", no_wrap=True)
    return table


def _hanging(mark: str, text: str) -> Table:
    table = Table.grid(padding=(0, 1))
    table.add_column(no_wrap=True)
    table.add_column(overflow="fold")
    table.add_row(Text(mark), Text(text))
    return table


def _listed(channels: tuple[int, ...] | list[int]) -> str:
    shown = ", ".join(str(channel) for channel in channels[:8])
    return shown if len(channels) <= 8 else f"{shown} and {len(channels) - 8} more"


def _seconds(value: float) -> str:
    return f"{1e3 * value:.4g} ms" if value < 1 else f"{value:.4g} s"


def _bytes(value: int) -> str:
    return f"{value / 1e9:.2f} GB" if value >= 1e9 else f"{value / 1e6:.0f} MB"
