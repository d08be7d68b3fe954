"""Small scenes for tests, as a parsed file would give them."""

import numpy as np

from soundrose.scene.scene_tables import parse_scene

RATE = 8000
SPEED = 1500.0
SILENT = {"enabled": False}


def raw_scene(**tables):
    """8 hydrophones 0.5 m apart, at rest at 20 m depth in 100 m of water that takes nothing; nothing else."""
    raw = {
        "name": "small",
        "seed": 3,
        "array": {"id": "aft", "hydrophones": 8, "spacing_m": 0.5},
        "feed": {"rate_hz": float(RATE), "type": "f4"},
        "calibration": {"sensitivity_db": -180.0, "gain_db": 0.0, "full_scale_v": 1.0},
        "water": {"depth_m": 100.0, "sound_speed_m_s": SPEED, "absorption": "none", "bottom_loss_db": 6.0},
        "own": {"array_depth_m": 20.0},
        "ambient": dict(SILENT),
    }
    for name, table in tables.items():
        raw[name] = {**raw[name], **table} if isinstance(raw.get(name), dict) else table
    return raw


def small_scene(**tables):
    return parse_scene(raw_scene(**tables), "small.toml")


def contact(**keys):
    """A ship of one tone and no other noise, at rest abeam, straight way only."""
    plain = {
        "name": "one", "kind": "ship", "range_m": 500.0, "bearing_deg": 90.0, "depth_m": 20.0, "bounces": 0,
        "level_db": -300.0, "tones": [[1000.0, 140.0]],
    }  # fmt: skip
    plain.update(keys)
    return {key: value for key, value in plain.items() if value is not None}


def click(**keys):
    """A source of single clicks, one every second from 0.5 s on; their peak is 5 ms after their beginning."""
    calls = [{"shape": "clicks", "level_db": 140.0, "count": 1, "gap_s": 0.02, "frequency_hz": 1000.0}]
    return contact(
        kind="animal", level_db=None, tones=None, calls=calls, first_s=0.5, interval_s=1.0, **keys
    )  # fmt: skip


def level_db(samples):
    """Mean-square level, dB re 1 µPa."""
    return 10 * np.log10(np.mean(np.asarray(samples, float) ** 2, axis=-1))
