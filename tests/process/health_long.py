"""Ten minutes in which nobody is sick: a ship passes close by, own shots every ten seconds, the array turns.

    python tests/process/health_long.py [--seconds 600] [--closest 40]

Prints every hydrophone that was said to be anything but good, with second and reason, and what ingest cost. Exit
status 0: none. The suite runs a short form.
"""

import argparse
import os
import sys
import tempfile
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from rig import ArrayModel, Block, Service, block_message, encode_samples
from rig.sea import Mover, far_contact, isotropic_sea, sea_density_db, shot_signal

ARRAY = ArrayModel(channels=48, spacing_m=0.375, rate_hz=8000.0, full_scale_v=250.0)
START = 1_796_133_600 * 10**9
BLOCK = 1000
SHIP_DB, OWN_DB = 150.0, 140.0  # density at 100 Hz and 1 m
SHOT_DB = 225.0  # peak at 1 m


@dataclass(frozen=True)
class Told:
    """seconds judged; accused, {(hydrophone, state): (first second, why)}; ingest_load, processor over feed time."""

    seconds: int
    accused: dict[tuple[int, str], tuple[int, str]]
    ingest_load: float


def ship_noise(level_db: float, tones: dict[float, float], seed: int, length_s: float = 30.0) -> np.ndarray:
    """At 1 m, repeated after `length_s`: noise that falls as the sea's does, and lines {Hz: dB re 1 micropascal m}."""
    n = int(length_s * ARRAY.rate_hz)
    rng, f = np.random.default_rng(seed), np.fft.rfftfreq(n, 1 / ARRAY.rate_hz)
    amplitude = np.sqrt(10 ** ((sea_density_db(f) - 85 + level_db) / 10) * ARRAY.rate_hz * n / 4)
    amplitude[(f < 20) | (f > 0.4 * ARRAY.rate_hz)] = 0
    sound = np.fft.irfft(amplitude * rng.standard_normal((len(f), 2)).view(complex)[:, 0], n)
    t = np.arange(n) / ARRAY.rate_hz
    return sound + sum(np.sqrt(2) * 10 ** (db / 20) * np.sin(2 * np.pi * hz * t) for hz, db in tones.items())


def movers(seconds: float, closest_m: float) -> list[Mover]:
    """A ship past the array's side; own ship and its shots ahead, which swing round it in the turn."""
    turn = [seconds * share for share in (0.0, 0.55, 0.6, 0.8, 0.85, 1.0)]
    reach = 2.5 * seconds  # 5 m/s
    rate = ARRAY.rate_hz
    ship = ((0.0, -reach, closest_m), (seconds, reach, closest_m))
    own = zip(turn, (180.0, 180.0, 120.0, -60.0, 180.0, 180.0), (0.0, 0.0, 130.0, 170.0, 0.0, 0.0), strict=True)
    guns = zip(turn, (120.0, 120.0, 100.0, -20.0, 120.0, 120.0), (0.0, 0.0, 70.0, 120.0, 0.0, 0.0), strict=True)
    return [
        Mover(ship_noise(SHIP_DB, {62.0: 160.0, 124.0: 157.0, 310.0: 155.0}, 31), rate, ship),
        Mover(ship_noise(OWN_DB, {50.0: 150.0}, 32), rate, tuple(own)),
        Mover(shot_signal(rate, 10.0, 30.0, 10 ** (SHOT_DB / 20)), rate, tuple(guns)),
    ]


def blocks(seconds: float, closest_m: float) -> Iterator[Block]:
    x_m, rate = ARRAY.positions_m[:, 0], ARRAY.rate_hz
    period = int(min(seconds, 40.0) * rate)
    sea = isotropic_sea(x_m, period, rate, seed=9) + far_contact(x_m, 60.0, 88.0, period, rate)
    near = movers(seconds, closest_m)
    for first in range(0, int(seconds * rate), BLOCK):
        sound = sea[:, np.arange(first, first + BLOCK) % period]
        sound = sound + sum(mover.heard(x_m, first / rate, BLOCK) for mover in near)
        yield Block(
            first,
            BLOCK,
            START + round(first / rate * 1e9),
            encode_samples(sound / ARRAY.full_scale_upa, "f4", "channel"),
        )


def processor_s(pid: int) -> float:
    fields = Path(f"/proc/{pid}/stat").read_text().rpartition(")")[2].split()
    return (int(fields[11]) + int(fields[12])) / os.sysconf("SC_CLK_TCK")


def watch(seconds: float, folder: Path, closest_m: float = 40.0) -> Told:
    """Send it all and collect what was said."""
    accused: dict[tuple[int, str], tuple[int, str]] = {}
    band = ARRAY.band(frame=8192, beams=9, band_hz=[100.0, 600.0])
    with Service(ARRAY.settings(band), folder) as service, service.listener("health", "status") as listener:
        processes = listener.of("status")[-1].header["processes"]
        ingest = next(p["pid"] for p in processes if p["name"] == "ingest")
        begun = processor_s(ingest)
        with service.feeder() as feeder:
            for block in blocks(seconds, closest_m):
                feeder.send(block_message(ARRAY, block, "long", type="f4"))
        found = listener.wait_count("health", int(seconds), 60)
        load = (processor_s(ingest) - begun) / seconds
    for second, message in enumerate(found):
        for channel in message.header["channels"]:
            if channel["state"] != "good":
                accused.setdefault((channel["i"], channel["state"]), (second, channel["why"]))
    return Told(len(found), accused, load)


def main() -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--seconds", type=float, default=600.0)
    parser.add_argument("--closest", type=float, default=40.0, help="of the ship, metres")
    arguments = parser.parse_args()
    with tempfile.TemporaryDirectory() as folder:
        told = watch(arguments.seconds, Path(folder), arguments.closest)
    for (i, state), (second, why) in sorted(told.accused.items()):
        print(f"hydrophone {i}: {state} from second {second}: {why}")
    count = len(told.accused)
    print(f"{told.seconds} s judged, {count} accusations; ingest took {told.ingest_load:.3f} of a core")
    return 1 if told.accused else 0


if __name__ == "__main__":
    sys.exit(main())
