"""Draws the pictures of docs/field-records.md, from maps that have been through the whole service.

python tests/process/draw_field_records.py
"""

import sys
import tempfile
from pathlib import Path

import matplotlib as mpl
import numpy as np
from field_line import AVERAGE_SLOWNESS_MS_M, RATE_HZ, SHOTS, STEERING_M_S, shares, shot_maps
from matplotlib import pyplot as plt
from rig import Message
from rig.field_records import read_record

PICTURES = Path(__file__).resolve().parents[2] / "docs" / "pictures"
SPAN_DB = 24.0


def slowness_ms_m(message: Message) -> np.ndarray:
    """(beams,) slowness along the line that each beam looks for."""
    return 1000 * message.cosines / STEERING_M_S


def draw_record(number: int) -> None:
    """Traces of a shot, each to its own peak, distance across and time down."""
    record = read_record(number)
    samples = record.resampled(RATE_HZ)
    figure, axes = plt.subplots(figsize=(5.2, 3.6), layout="constrained")
    times = np.arange(samples.shape[1]) / RATE_HZ
    for place, trace in zip(record.receivers_m, samples, strict=True):
        axes.plot(place + 3.5 * trace / np.abs(trace).max(), times, lw=0.6, color="#20435c")
    axes.set(xlabel="distance along the line, m", ylabel="time, s", xlim=(-6, 98), ylim=(1.0, 0.0))
    axes.set_title(f"Shot {number}: source at {record.source_m:g} m", fontsize=10)
    save(figure, f"field-record-{number}.png")


def draw_maps(maps: dict[int, Message]) -> None:
    """The map of each shot, 5 to 80 Hz, level under the loudest cell."""
    figure, rows = plt.subplots(2, 2, figsize=(7.6, 5.4), layout="constrained", sharex=True, sharey=True)
    for axes, number in zip(rows.flat, SHOTS, strict=True):
        message = maps[number]
        f, u = message.frequencies_hz, message.cosines
        level = message.level_db[:, f <= 80]
        shown = level - level.max()
        mesh = axes.pcolormesh(f[f <= 80], u, shown, vmin=-SPAN_DB, vmax=0, cmap="cividis", shading="nearest")
        if number in AVERAGE_SLOWNESS_MS_M:
            axes.axhline(AVERAGE_SLOWNESS_MS_M[number] * STEERING_M_S / 1000, color="white", lw=0.9, ls="--")
        axes.set_title(f"Shot {number}: source at {read_record(number).source_m:g} m", fontsize=10)
    for axes in rows[1]:
        axes.set_xlabel("frequency, Hz")
    for axes in rows[:, 0]:
        axes.set_ylabel("cosine, steered at 140 m/s")
    figure.colorbar(mesh, ax=rows, label="level re the loudest cell, dB", shrink=0.8)
    save(figure, "field-maps.png", dpi=70)


def draw_shares(maps: dict[int, Message]) -> None:
    """What the tests judge: the share of each beam, 10 to 60 Hz."""
    figure, axes = plt.subplots(figsize=(7.0, 3.6), layout="constrained")
    styles = {2002: ("#0b5c8a", "-"), 2004: ("#c05a00", "-"), 2005: ("#8a5a9e", "--"), 2003: ("#666666", ":")}
    for number in SHOTS:
        share = shares(maps[number])
        colour, line = styles[number]
        label = f"{number}, source at {read_record(number).source_m:g} m"
        axes.plot(slowness_ms_m(maps[number]), share / share.sum(), color=colour, ls=line, label=label)
    for value in set(AVERAGE_SLOWNESS_MS_M.values()):
        axes.axvspan(0.9 * value, 1.1 * value, color="#dddddd", zorder=0)
    axes.set(xlabel="slowness along the line, ms/m", ylabel="share of a beam, 10 to 60 Hz", ylim=(0, None))
    axes.legend(frameon=False, fontsize=9)
    save(figure, "field-shares.png")


def save(figure: plt.Figure, name: str, dpi: int = 100) -> None:
    PICTURES.mkdir(parents=True, exist_ok=True)
    figure.savefig(PICTURES / name, dpi=dpi, metadata={"Software": None})
    plt.close(figure)


def main() -> int:
    """Draw them all and print the table of the page."""
    mpl.use("Agg")
    with tempfile.TemporaryDirectory() as folder:
        maps = shot_maps(Path(folder))
    draw_record(2002)
    draw_maps(maps)
    draw_shares(maps)
    for number in SHOTS:
        share, u = shares(maps[number]), maps[number].cosines
        ends = 10 * np.log10(share[u > 0.1].max() / share[u < -0.1].max())
        print(f"{number}: loudest at {slowness_ms_m(maps[number])[share.argmax()]:+.3f} ms/m, "
              f"forward over aft {ends:+.1f} dB")  # fmt: skip
    return 0


if __name__ == "__main__":
    sys.exit(main())
