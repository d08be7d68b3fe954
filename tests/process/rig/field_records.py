"""Real line records, fetched by name when asked for: 24 geophones, hammer shots at known places; never committed.

Source: the example data of the package `refrapy` 0.2.4.1 (MIT licence, package-wide; no separate data licence). Only
its data files are read, out of the wheel; the package is neither installed nor imported. Format SEG-2: Pullan 1990,
Recommended standard for seismic (/radar) data files in the personal computer environment, Geophysics 55(9) 1260-1271.
"""

import hashlib
import struct
import subprocess
import sys
import zipfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.signal import resample_poly

__all__ = ["Record", "fetch_wheel", "read_record", "read_seg2"]

PACKAGE = "refrapy==0.2.4.1"
WHEEL = "refrapy-0.2.4.1-py3-none-any.whl"
SHA256 = "c704fc7e0093c3ab5598caf727d425ff55cef2922b5dadaf16d404e7c1c60f7d"
FOLDER = "refrapy/data/field_example_01/data"
CACHE = Path(__file__).resolve().parents[2] / ".data"
SAMPLE_TYPES = {1: "<i2", 2: "<i4", 4: "<f4", 5: "<f8"}  # SEG-2 data format codes that are read here


@dataclass(frozen=True)
class Record:
    """samples : (channels, n) float64, counts; receivers_m, source_m along the line."""

    samples: np.ndarray
    rate_hz: float
    receivers_m: np.ndarray
    source_m: float

    def resampled(self, rate_hz: float) -> np.ndarray:
        """At a lower rate, every channel by the same symmetric filter, so that no phase between channels changes."""
        ratio = round(self.rate_hz / rate_hz)
        assert ratio * rate_hz == self.rate_hz
        return resample_poly(self.samples, 1, ratio, axis=1)


def fetch_wheel(folder: Path = CACHE) -> Path:
    """The wheel in `folder`, by the ordinary client where it is not there yet; its SHA-256 is checked every time."""
    path = folder / WHEEL
    if not path.exists():
        folder.mkdir(parents=True, exist_ok=True)
        command = [sys.executable, "-m", "pip", "download", "--quiet", "--no-deps", "--only-binary=:all:",
                   "--python-version", "3.12", "-d", str(folder), PACKAGE]  # fmt: skip
        subprocess.run(command, check=True, timeout=100)
    if (found := hashlib.sha256(path.read_bytes()).hexdigest()) != SHA256:
        raise ValueError(f"{path}: SHA-256 {found}, not {SHA256}; delete it and fetch it again")
    return path


def read_record(number: int) -> Record:
    """One shot of the first example set, 2001 to 2005."""
    with zipfile.ZipFile(fetch_wheel()) as wheel:
        return read_seg2(wheel.read(f"{FOLDER}/{number}.dat"))


def read_seg2(raw: bytes) -> Record:
    """A little-endian SEG-2 file; ValueError where it is none."""
    if raw[:2] != b"\x55\x3a":
        raise ValueError(f"begins with {raw[:2]!r}; a little-endian SEG-2 file begins with 55 3A")
    (count,) = struct.unpack_from("<H", raw, 6)
    traces = [_trace(raw, at) for at in struct.unpack_from(f"<{count}I", raw, 32)]
    words = [keys for keys, _ in traces]
    return Record(
        np.stack([samples for _, samples in traces]),
        1 / float(words[0]["SAMPLE_INTERVAL"]),
        np.array([float(keys["RECEIVER_LOCATION"].split()[0]) for keys in words]),
        float(words[0]["SOURCE_LOCATION"].split()[0]),
    )


def _trace(raw: bytes, at: int) -> tuple[dict[str, str], np.ndarray]:
    """Words and scaled samples of the trace block at that byte."""
    mark, size, _, samples, code = struct.unpack_from("<HHIIB", raw, at)
    if mark != 0x4422:
        raise ValueError(f"trace block at byte {at} begins with {mark:#06x}; 0x4422 is due")
    keys, place = {}, at + 32
    while place < at + size:
        (length,) = struct.unpack_from("<H", raw, place)
        if length < 3:
            break
        name, _, value = raw[place + 2 : place + length].split(b"\0")[0].decode("latin-1").partition(" ")
        keys[name] = value.strip()
        place += length
    values = np.frombuffer(raw, SAMPLE_TYPES[code], samples, at + size).astype(float)
    return keys, values * float(keys.get("DESCALING_FACTOR", 1.0))
