"""core: the answer of `GET /api/v1/array`: the array as configured, and what it can and cannot do, predicted."""

from collections.abc import Collection, Mapping
from dataclasses import replace
from math import cos, degrees, radians
from typing import Any

import numpy as np
from numpy.typing import NDArray

from soundrose.array.geometry import band_geometry, cos_grid
from soundrose.array.limits import Line, alias_onset_hz, line_of
from soundrose.errors import UsageError
from soundrose.product.messages import VERSION
from soundrose.settings_types import BandSettings, Settings

__all__ = ["array_answer", "band_line", "channels_out"]

#: cone angles for which the limits are given: broadside, and near endfire as it still makes sense for a line
ANGLES_DEG = (90.0, 30.0)
#: directions of the single plane waves whose pattern over all beams is predicted
WAVES_DEG = (90.0, 60.0, 30.0)
FREQUENCIES = 8
PATTERN_FLOOR_DB = -120.0  #: zeros of a pattern read this
_OUT = frozenset({"excluded", "dead"})  #: health states whose hydrophones beams do without


def channels_out(settings: Settings, health: Mapping[str, Any] | None) -> dict[int, str]:
    """Channel -> why it is not used: by the newest health message, or by the settings before there is one."""
    out = dict.fromkeys(settings.array.exclude, "excluded")
    for channel in health["channels"] if health else ():
        if channel["state"] in _OUT:
            out[int(channel["i"])] = str(channel["state"])
    return out


def band_line(settings: Settings, band: BandSettings, out: Collection[int]) -> Line | None:
    """The band's line with the hydrophones that are left, weights brought back to the sum 1; None: none is left."""
    try:
        line = line_of(settings, band)
    except UsageError:
        return None
    weights = np.where(np.isin(band_geometry(settings, band).channels, list(out)), 0.0, line.weights)
    total = float(weights.sum())
    return replace(line, weights=weights / total) if total > 0 else None


def array_answer(settings: Settings, out: Mapping[int, str]) -> dict[str, Any]:
    """Everything the call tells. out : channel -> why it is not used."""
    places = np.asarray(settings.array.positions_m, dtype=np.float64)
    places = places - places.mean(axis=0)
    length = float(np.ptp(places[:, 0]))
    water = settings.water
    return {
        "v": VERSION,
        "array": settings.array.id,
        "rate_hz": settings.feed.rate_hz,
        "sound_speed_m_s": water.sound_speed_m_s,
        "sound_speed_from": water.source,
        "calibrated": settings.calibration.given,
        "length_m": length,
        "transit_s": length / water.sound_speed_m_s,
        "hydrophones": [
            {"i": i, "position_m": [round(float(v), 9) for v in place], "used": i not in out, "why": out.get(i)}
            for i, place in enumerate(places)
        ],
        "used": settings.array.channels - len(out),
        "bands": [_band(settings, band, out) for band in settings.bands],
    }


def _band(settings: Settings, band: BandSettings, out: Mapping[int, str]) -> dict[str, Any]:
    grid, line = cos_grid(band.beams), band_line(settings, band, out)
    spacing = band_geometry(settings, band).spacing_m
    speed = settings.water.sound_speed_m_s
    onsets = [None if spacing is None else alias_onset_hz(spacing, speed, float(u)) for u in grid]
    return {
        "name": band.name,
        "band_hz": list(band.band_hz),
        "frame": band.frame,
        "df_hz": settings.feed.rate_hz / band.frame,
        "average_s": band.average_s,
        "shading": band.shading if isinstance(band.shading, str) else list(band.shading),
        "channels": list(band.channels),
        "channels_used": [channel for channel in band.channels if channel not in out],
        "weights": None if line is None else [round(float(w), 9) for w in line.weights],
        "length_m": band_geometry(settings, band).length_m,
        "aperture_m": None if line is None else line.aperture_m,
        "spacing_m": spacing,
        "transit_s": band_geometry(settings, band).length_m / speed,
        "beams": [
            {"cone_deg": round(degrees(np.arccos(u)), 6), "alias_hz": onset}
            for u, onset in zip(grid, onsets, strict=True)
        ],
        "limits": [] if line is None else [_limits(line, f) for f in _frequencies(settings, band)],
        "pattern": [] if line is None else [_pattern(line, grid, f, w) for f in _two(band) for w in WAVES_DEG],
    }


def _frequencies(settings: Settings, band: BandSettings) -> list[float]:
    """The band's edges and some between, evenly spaced in ratio; from the first bin above 0 Hz."""
    low, high = band.band_hz
    low = max(low, min(settings.feed.rate_hz / band.frame, high / 2))
    between = (float(f"{f:.3g}") for f in np.geomspace(low, high, FREQUENCIES)[1:-1])
    return [low, *(f for f in dict.fromkeys(between) if low < f < high), high]


def _two(band: BandSettings) -> tuple[float, float]:
    """The top of the band, where the pattern is sharpest, and half of it."""
    return band.band_hz[1] / 2, band.band_hz[1]


def _limits(line: Line, f_hz: float) -> dict[str, Any]:
    return {
        "f_hz": f_hz,
        "wavelength_m": line.sound_speed_m_s / f_hz,
        "at": [_limit(line, f_hz, a) for a in ANGLES_DEG],
    }


def _limit(line: Line, f_hz: float, angle_deg: float) -> dict[str, Any]:
    u = cos(radians(angle_deg))
    far = line.far_field_m(f_hz, u)
    shares = (("far_field", 1.0), ("half", 0.5), ("quarter", 0.25))
    return {
        "cone_deg": angle_deg,
        "beamwidth_deg": line.beamwidth_deg(f_hz, u),
        "array_gain_db": round(line.array_gain_db(f_hz, u), 3),
        "far_field_m": far,
        "level_error_db": {
            name: round(-line.focus_loss_db(f_hz, u, far * share), 3) if far > 0 else 0.0 for name, share in shares
        },
    }


def _pattern(line: Line, grid: NDArray[np.float64], f_hz: float, wave_deg: float) -> dict[str, Any]:
    """What each beam reads of one plane wave, dB re its level."""
    apart = f_hz / line.sound_speed_m_s * (cos(radians(wave_deg)) - grid)
    power = np.maximum(line.pattern(apart), 10 ** (PATTERN_FLOOR_DB / 10))
    return {"f_hz": f_hz, "wave_cone_deg": wave_deg, "level_db": np.round(10 * np.log10(power), 3).tolist()}
