"""Maps of a scene against the truth of it: level and bearing of every contact that stands out, bounce, hum, strum.

As a program: `python tests/scene/truth_against_maps.py --seconds 600` (the long form; the suite runs a short one).
"""

import argparse
import json
import sys
from dataclasses import dataclass, field

import numpy as np
from expected_maps import ExpectedBand

from soundrose import Pipeline
from soundrose.product.messages import MapProduct
from soundrose.scene.engine import Sea
from soundrose.scene.place import arrivals
from soundrose.scene.recorder import Recorder
from soundrose.scene.scene_file import load_scene, shipped
from soundrose.scene.scene_types import Motor
from soundrose.settings import load_settings

SNR = 10**0.6  # 6 dB
LEAST_BINS = 24  # in which a contact must stand out: fewer do not average the noise under it away
SETTLE_S = 4.0
LINES = 4  # bins beside a tone that are left out
CHECKS_S = 2.0
LINES_MAPS = 100  # averaged for hum and strum, whose amplitude breathes


@dataclass
class Finding:
    band: str
    contact: str
    t_s: float
    bins: int
    snr_db: float
    level_db: float  # measured - true
    widths: float | None  # bearing of the peak, measured - true, in half-power widths; None where truth has no peak
    from_geometry: float | None  # the same against the straight line from the array to the contact
    cone_deg: float


@dataclass
class Report:
    findings: list = field(default_factory=list)
    bounce: list = field(default_factory=list)  # (t, cone by geometry, measured, widths: measured, true map, width)
    lines: list = field(default_factory=list)  # (name, Hz, true cone of the peak, measured, rms dB of the pattern)
    maps: int = 0


def compare(scene, settings, seconds):
    """Runs the scene through the pipeline and its expectation beside it."""
    bands = {band.name: ExpectedBand(scene, settings, band) for band in settings.bands}
    pipeline, report, due = Pipeline(settings), Report(), dict.fromkeys(bands, SETTLE_S)
    line_sums = {
        name: [np.zeros((b.band.beams, len(b.f))), np.zeros((b.band.beams, len(b.f))), 0] for name, b in bands.items()
    }
    recorder = Recorder(scene, "truth", 10**18, 1600, round(seconds * scene.rate_hz), Sea(scene))
    for sent in recorder.messages():
        for product in pipeline.push(sent.parts):
            if not isinstance(product, MapProduct):
                continue
            band = bands[product.header["band"]]
            report.maps += 1
            end = round((product.header["t_end"] - 10**18) * scene.true_rate_hz / 1e9)
            band.add(end, product.header["limits"]["channels_used"])
            power = 10 ** (product.level_db.astype(float) / 10)
            line_sums[band.band.name][0] += power
            line_sums[band.band.name][1] += band.noise() + sum(band.sources().values())
            line_sums[band.band.name][2] += 1
            if line_sums[band.band.name][2] >= LINES_MAPS:
                total, rest, count = line_sums[band.band.name]
                check_lines(band, total / count, rest / count, report)
                line_sums[band.band.name] = [0 * total, 0 * rest, 0]
            if end / scene.rate_hz >= due[band.band.name]:
                due[band.band.name] += CHECKS_S
                check(band, power, end / scene.rate_hz, report)
    return report


def check(band, power, t_s, report):
    """Each contact that stands out in enough bins: level on its beam, bearing of its peak."""
    sources, noise = band.sources(), band.noise()
    clear = np.ones(len(band.f), bool)
    for line in _tones(band.scene):
        clear &= np.abs(band.f - line) > (LINES + 0.01 * line * band.frame / band.rate) * band.rate / band.frame
    everything = noise + sum(sources.values())
    for emitter in band.scene.emitters:
        own = sources[emitter.name]
        t = np.array([t_s])
        arrival = arrivals(emitter, band.line, band.scene.water, t)
        true_cos = float((arrival.direction[0, 0] * band.line.forward(t)[0]).sum())
        beam = int(np.argmin(np.abs(band.cos - true_cos)))
        snr = own[beam] / (everything[beam] - own[beam])
        chosen = clear & (snr > SNR)
        if chosen.sum() < LEAST_BINS:
            continue
        true, found = everything[:, chosen].sum(axis=1), power[:, chosen].sum(axis=1)
        width = _width(band, own[beam, chosen], chosen, true_cos)
        near = np.abs(band.cos - true_cos) <= max(width, 2.1 * (band.cos[0] - band.cos[1]))
        top = int(np.argmax(np.where(near, true, 0)))
        mine = own[top, chosen].sum()  # a peak, and its own: not one on the skirt of something louder
        peaked = _is_peak(band.cos, true, near) and mine > SNR * (true[top] - mine)
        report.findings.append(
            Finding(
                band.band.name, emitter.name, t_s, int(chosen.sum()),
                10 * np.log10(own[beam, chosen].sum() / (everything - own)[beam, chosen].sum()),
                10 * np.log10(found[beam] / true[beam]),
                (_peak(band.cos, found, near) - _peak(band.cos, true, near)) / width if peaked else None,
                (_peak(band.cos, found, near) - true_cos) / width if peaked else None,
                float(np.degrees(np.arccos(true_cos))),
            )
        )  # fmt: skip
    check_bounce(band, power, everything, sources, clear, t_s, report)


def check_bounce(band, power, everything, sources, clear, t_s, report):
    """Own ship by way of the bottom: a peak of its own at the cone angle of the geometry."""
    own = [e for e in band.scene.emitters if e.way is band.scene.own.way and e.bounces and isinstance(e.sound, Motor)]
    for emitter in own:
        t = np.array([t_s])
        arrival = arrivals(emitter, band.line, band.scene.water, t)
        cosines = arrival.direction[2, 0] @ band.line.forward(t)[0]
        beam = int(np.argmin(np.abs(band.cos - cosines)))
        mine, whole = band.bottom()[emitter.name], sources[emitter.name]
        others = everything - whole + np.abs(np.sqrt(whole) - np.sqrt(mine)) ** 2  # the straight way among them
        chosen = clear & (mine[beam] > SNR * others[beam])
        if chosen.sum() < LEAST_BINS:
            continue
        width = _width(band, mine[beam, chosen], chosen, float(cosines))
        near = np.abs(band.cos - cosines) <= width
        found = power[:, chosen].sum(axis=1)
        true = everything[:, chosen].sum(axis=1)
        top = int(np.argmax(np.where(near, true, 0)))
        if not _is_peak(band.cos, true, near) or mine[top, chosen].sum() < SNR * others[top, chosen].sum():
            report.bounce.append((t_s, float(np.degrees(np.arccos(cosines))), None, None))
            continue
        peak = _peak(band.cos, found, near)
        true_peak = (_peak(band.cos, true, near) - cosines) / width
        angles = [float(np.degrees(np.arccos(value))) for value in (cosines, peak)]
        report.bounce.append((t_s, *angles, (peak - cosines) / width, true_peak, width))


def check_lines(band, mean_power, rest, report):
    """Hum and strum: the pattern over beams at the bin of each line, against the closed form of its wave."""
    scene = band.scene
    x = np.array(scene.array.positions_m)[:, 0]
    lag = x.max() - x[band.channels]
    tones = [("hum", f, level, 0 * lag, 0 * lag) for f, level in (scene.hum.tones if scene.hum else ())]
    if scene.strum:
        for f, level in scene.strum.tones:
            tones.append(("strum", f, level, lag / scene.strum.wave_speed_m_s, lag / scene.strum.decay_m))
    for name, f, level, delay, fade in tones:
        if not band.f[0] + 10 < f < band.f[-1] - 10:
            continue
        at = int(np.argmin(np.abs(band.f - f)))
        wave = band.weights * np.exp(-fade - 2j * np.pi * f * delay)
        steer = np.exp(-2j * np.pi * f * band.cos[:, None] * band.x / band.settings.water.sound_speed_m_s)
        off = (f - band.f[at]) * band.frame / band.rate
        kernel = abs(np.sinc(off) / (1 - off**2)) ** 2 / 1.5 * band.frame / band.rate  # Hann, noise bandwidth 1.5 bins
        true = 10 ** (level / 10) * np.abs(steer @ wave) ** 2 * kernel + rest[:, at]
        strong = (true > true.max() / 10) & (true > 4 * rest[:, at])
        if strong.sum() < 3:
            continue
        ratio = 10 * np.log10(mean_power[strong, at] / true[strong])
        peaks = [
            float(np.degrees(np.arccos(band.cos[int(np.argmax(np.where(strong, p, 0)))])))
            for p in (true, mean_power[:, at])
        ]
        report.lines.append((name, f, *peaks, float(np.mean(ratio)), float(np.std(ratio))))


def _tones(scene):
    found = [f for e in scene.emitters if isinstance(e.sound, Motor) for f, _ in e.sound.tones]
    found += [f for f, _ in scene.hum.tones] if scene.hum else []
    return found + ([f for f, _ in scene.strum.tones] if scene.strum else [])


def _width(band, power, chosen, cosine):
    """Half-power width in cosine of a beam to one plane wave, over the bins and powers given."""
    away = np.linspace(0, 1, 400)
    f = band.f[chosen][:: max(1, len(power) // 40)]
    p = power[:: max(1, len(power) // 40)]
    phase = np.exp(2j * np.pi * f[:, None, None] * away[:, None] * band.x / band.settings.water.sound_speed_m_s)
    response = (np.abs(phase @ band.weights) ** 2 * (p / p.sum())[:, None]).sum(axis=0)
    return 2 * float(away[int(np.argmax(response < 0.5))])


def _is_peak(cos, power, near):
    """Whether the highest of the beams `near` stands above its neighbours, or at the end of the grid."""
    i, inside = int(np.argmax(np.where(near, power, 0))), np.flatnonzero(near)
    return (i not in (inside[0], inside[-1])) or i in (0, len(cos) - 1)


def _peak(cos, power, near):
    """Cosine of the highest point among the beams `near`, by a parabola through three levels."""
    i = int(np.argmax(np.where(near, power, 0)))
    if i in (0, len(cos) - 1):
        return cos[i]
    left, middle, right = 10 * np.log10(power[i - 1 : i + 2])
    bend = left - 2 * middle + right
    return cos[i] + (0.5 * (left - right) / bend if bend < 0 else 0.0) * (cos[1] - cos[0])


def summary(report):
    """One row per band and contact: checks, worst and rms of level and bearing."""
    rows = []
    for band, contact in sorted({(f.band, f.contact) for f in report.findings}):
        mine = [f for f in report.findings if (f.band, f.contact) == (band, contact)]
        level = np.array([f.level_db for f in mine])
        peaks = [f for f in mine if f.widths is not None]
        widths = np.array([f.widths for f in peaks] or [0.0])
        rows.append({
            "band": band, "contact": contact, "checks": len(mine), "peaks": len(peaks),
            "level_rms_db": float(np.sqrt((level**2).mean())), "level_worst_db": float(np.abs(level).max()),
            "bearing_rms_widths": float(np.sqrt((widths**2).mean())),
            "bearing_worst_widths": float(np.abs(widths).max()),
            "geometry_rms_widths": float(np.sqrt(np.mean([f.from_geometry**2 for f in peaks] or [0]))),
            "over_half_db": int((np.abs(level) > 0.5).sum()), "over_a_tenth": int((np.abs(widths) > 0.1).sum()),
        })  # fmt: skip
    return rows


def _bounces(report, pull=np.inf):
    """Checks in which the bounce has a peak, which in the true map lies within `pull` widths of the geometry."""
    return [row for row in report.bounce if row[2] is not None and abs(row[4]) <= pull]


def main():
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--scene", default=None)
    parser.add_argument("--settings", default=None)
    parser.add_argument("--seconds", type=float, default=600.0)
    parser.add_argument("--findings", action="store_true", help="print each check")
    asked = parser.parse_args()
    scene = load_scene(asked.scene or shipped("demo.toml"))
    report = compare(scene, load_settings(asked.settings or shipped("demo-settings.toml")), asked.seconds)
    if asked.findings:
        for finding in report.findings:
            print(json.dumps(vars(finding)))
    for row in summary(report):
        print(json.dumps(row))
    for name, f in sorted({line[:2] for line in report.lines}):
        mine = np.array([line[2:] for line in report.lines if line[:2] == (name, f)])
        print(f"{name} {f:g} Hz: {len(mine)} averages; peak true {mine[:, 0].mean():.1f} deg,"
              f" measured {mine[:, 1].mean():.1f};"
              f" level {mine[:, 2].mean():+.2f} dB; pattern over beams within {mine[:, 3].max():.2f} dB")  # fmt: skip
    for text, found in (
        ("as the true map has it", _bounces(report)),
        ("where nothing pulls it", _bounces(report, 0.05)),
    ):
        away = np.array([row[3] - row[4] if text.startswith("as") else row[3] for row in found] or [0.0])
        print(f"bounce, {text}: {len(found)} checks, off by {np.abs(away).max():.3f} widths at most,"
              f" rms {np.sqrt((away**2).mean()):.3f}")  # fmt: skip
    print(f"{report.maps} maps")
    bad = [f for f in report.findings if abs(f.level_db) > 0.5 or abs(f.widths or 0) > 0.1]
    return 1 if bad or not report.findings else 0


if __name__ == "__main__":
    sys.exit(main())
