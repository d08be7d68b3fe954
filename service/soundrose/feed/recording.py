"""codec: recordings as one run of samples: files in a row, groups of channels side by side, values as they were stored.

What is stored as integers stays integers of the same width; nothing is scaled. One block at a time is in memory.
"""

import tomllib
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
import soundfile
from numpy.typing import NDArray

from soundrose.errors import StreamError, UsageError
from soundrose.feed.messages import SampleType

__all__ = ["SUBTYPES", "Part", "Recording", "open_recording", "parse_channels", "read_channel_map"]

#: how samples are stored -> (as what they are sent, as what soundfile reads them, bits it puts below the lowest)
SUBTYPES: Final[dict[str, tuple[SampleType, str, int]]] = {
    "PCM_16": ("i2", "int16", 0),
    "PCM_24": ("i3", "int32", 8),
    "PCM_32": ("i4", "int32", 0),
    "FLOAT": ("f4", "float32", 0),
    "DOUBLE": ("f4", "float32", 0),
}
LENGTH_LIMIT: Final = 1 << 53  # the feed's own; a file without a known length reports more
CHANNEL_LIMIT: Final = 65536


@dataclass(frozen=True, slots=True)
class Part:
    """Files that follow one another. channels : the array's channels that they carry, as stored; None: all."""

    files: tuple[Path, ...]
    channels: tuple[int, ...] | None = None


@dataclass(frozen=True, slots=True)
class _File:
    """What the head of one file says."""

    path: Path
    rate_hz: float
    channels: int
    samples: int
    subtype: str


@dataclass(frozen=True, slots=True)
class _Segment:
    """Files side by side over one stretch of time. columns : places in them, joined, of the channels to send."""

    files: tuple[_File, ...]
    columns: tuple[int, ...]

    @property
    def samples(self) -> int:
        return self.files[0].samples


@dataclass(frozen=True, slots=True)
class Recording:
    """Recordings whose heads agree.

    rate_hz : as stored.  channels : to be sent.  samples : sample instants in all files together.
    subtype : as stored (a key of SUBTYPES).
    """

    rate_hz: float
    channels: int
    samples: int
    subtype: str
    segments: tuple[_Segment, ...]

    @property
    def type(self) -> SampleType:
        """As what the samples are sent."""
        return SUBTYPES[self.subtype][0]

    @property
    def duration_s(self) -> float:
        return self.samples / self.rate_hz

    def blocks(self, length: int) -> Iterator[NDArray[np.generic]]:
        """(channels, n) arrays in order, n <= `length`, of the stored values; a block ends where a file ends.

        StreamError if a file holds less than its head says, or cannot be read on.
        """
        for segment in self.segments:
            yield from _segment_blocks(segment, length)


def open_recording(parts: Sequence[Part], selection: Sequence[int] | None = None) -> Recording:
    """Reads the heads of all files and sets them in order; no samples yet.

    Parameters
    ----------
    parts : one part, or several that lie side by side.
    selection : which of the channels to send, in this order; None sends all.

    Raises
    ------
    UsageError : a file that cannot be read, files that do not agree, channels that are not there.
    """
    heads = [tuple(_head(path) for path in part.files) for part in parts]
    first = _check_agreement(heads)
    order = _column_order(parts, heads)
    chosen = order if selection is None else tuple(order[i] for i in _checked_selection(selection, len(order)))
    segments = tuple(_Segment(files, chosen) for files in zip(*heads, strict=True))
    total = sum(segment.samples for segment in segments)
    return Recording(first.rate_hz, len(chosen), total, first.subtype, segments)


def parse_channels(text: str) -> tuple[int, ...]:
    """Channel numbers from a list such as "0,2,5:9" (5:9 is 5, 6, 7, 8; 0:48:2 every second). UsageError otherwise."""
    channels: list[int] = []
    for item in text.split(","):
        try:
            numbers = [int(number) for number in item.split(":")]
            listed = range(numbers[0], numbers[0] + 1) if len(numbers) == 1 else range(*numbers)
        except (ValueError, TypeError):
            raise UsageError(f"channels: got {text!r}; give numbers and ranges such as 0,2,5:9 or 0:48:2") from None
        if len(numbers) > 1 and not listed:
            raise UsageError(f"channels: {item!r} in {text!r} holds no channel; a range such as 5:9 means 5 to 8")
        if len(channels) + len(listed) > CHANNEL_LIMIT:
            raise UsageError(f"channels: {text!r} lists more than {CHANNEL_LIMIT}")
        channels.extend(listed)
    return tuple(channels)


def read_channel_map(path: Path) -> list[Part]:
    """The parts in a channel map (TOML): `[[part]]` with `files` (in order, relative to it) and `channels`.

    UsageError: it cannot be read, or a part lacks one of them.
    """
    try:
        raw = tomllib.loads(path.read_text("utf-8"))
    except (OSError, ValueError, RecursionError) as error:
        raise UsageError(f"{path}: {error}") from None
    parts = raw.get("part")
    if not isinstance(parts, list) or not parts or set(raw) != {"part"}:
        raise UsageError(f"{path}: a channel map holds one or more [[part]] tables and nothing else")
    return [_parse_part(part, f"{path}: part[{i}]", path.parent) for i, part in enumerate(parts)]


def _parse_part(part: Any, where: str, folder: Path) -> Part:
    if not isinstance(part, dict) or set(part) != {"files", "channels"}:
        raise UsageError(f'{where}: give files = ["a.flac"] and channels = [0, 1] (or "0:8"), and nothing else')
    files, channels = part["files"], part["channels"]
    if not isinstance(files, list) or not files or not all(isinstance(name, str) for name in files):
        raise UsageError(f"{where}.files: got {files!r}; must be a list of one or more file names")
    if isinstance(channels, str):
        channels = list(parse_channels(channels))
    if not isinstance(channels, list) or not all(isinstance(i, int) and not isinstance(i, bool) for i in channels):
        raise UsageError(f'{where}.channels: got {channels!r}; must be a list of numbers, or text such as "0:8"')
    return Part(tuple(folder / name for name in files), tuple(channels))


def _head(path: Path) -> _File:
    try:
        info = soundfile.info(str(path))
    except (RuntimeError, OSError, TypeError) as error:
        raise UsageError(f"{path}: cannot be read as a recording ({_reason(error)}); give WAV, RF64 or FLAC") from None
    if info.subtype not in SUBTYPES:
        raise UsageError(f"{path}: stored as {info.subtype}; must be one of {', '.join(SUBTYPES)}")
    if not 0 <= info.frames < LENGTH_LIMIT:
        raise UsageError(f"{path}: does not say how long it is; write it anew with its length")
    return _File(path, float(info.samplerate), info.channels, info.frames, info.subtype)


def _reason(error: Exception) -> str:
    return str(getattr(error, "error_string", error)).strip().rstrip(".")


def _check_agreement(heads: Sequence[Sequence[_File]]) -> _File:
    """The first head. UsageError unless rate and subtype agree, channels in a part, lengths side by side."""
    if not heads or not heads[0]:
        raise UsageError("no recording given")
    first = heads[0][0]
    for part in heads:
        if len(part) != len(heads[0]):
            raise UsageError(
                f"{part[0].path}: its part has {len(part)} files, that of {first.path} has {len(heads[0])}; "
                "every part needs as many"
            )
        for file in part:
            _check_like(file, first, "rate_hz", "subtype")
            _check_like(file, part[0], "channels")
        for file, beside in zip(part, heads[0], strict=True):
            _check_like(file, beside, "samples")
    if not any(file.samples for file in heads[0]):
        raise UsageError(f"{first.path}: holds no samples")
    return first


def _check_like(file: _File, model: _File, *names: str) -> None:
    for name in names:
        got, wanted = getattr(file, name), getattr(model, name)
        if got != wanted:
            raise UsageError(f"{file.path}: {name} is {got}; {model.path} has {wanted}, and they must be the same")


def _column_order(parts: Sequence[Part], heads: Sequence[Sequence[_File]]) -> tuple[int, ...]:
    """For each channel of the array its column in the files of a segment, laid side by side."""
    listed: list[int] = []
    for part, head in zip(parts, heads, strict=True):
        stored = head[0].channels
        channels = tuple(range(stored)) if part.channels is None else part.channels
        if len(channels) != stored:
            raise UsageError(f"{head[0].path}: holds {stored} channels; {len(channels)} are listed for it")
        listed.extend(channels)
    if sorted(listed) != list(range(len(listed))):
        raise UsageError(
            f"the parts list channels {sorted(listed)}; together they must list each of 0 to {len(listed) - 1} once"
        )
    return tuple(listed.index(channel) for channel in range(len(listed)))


def _checked_selection(selection: Sequence[int], channels: int) -> Sequence[int]:
    if wrong := [i for i in selection if not 0 <= i < channels]:
        raise UsageError(f"channels {wrong} are not there; the recording has 0 to {channels - 1}")
    if not selection or len(set(selection)) != len(selection):
        raise UsageError(f"channels {list(selection)}: list one or more, each once")
    return selection


def _segment_blocks(segment: _Segment, length: int) -> Iterator[NDArray[np.generic]]:
    _, dtype, below = SUBTYPES[segment.files[0].subtype]
    columns = None if segment.columns == tuple(range(sum(f.channels for f in segment.files))) else list(segment.columns)
    with ExitStack() as stack:
        opened = [stack.enter_context(_open(file)) for file in segment.files]
        for begin in range(0, segment.samples, length):
            wanted = min(length, segment.samples - begin)
            read = [
                _read(file, begin, wanted, dtype, source) for file, source in zip(segment.files, opened, strict=True)
            ]
            joined = read[0] if len(read) == 1 else np.concatenate(read, axis=1)
            if columns is not None:
                joined = joined[:, columns]
            yield (joined >> below if below else joined).T


def _open(file: _File) -> soundfile.SoundFile:
    try:
        return soundfile.SoundFile(str(file.path))
    except (RuntimeError, OSError) as error:
        raise StreamError(f"{file.path}: cannot be opened any more ({_reason(error)})") from None


def _read(file: _File, begin: int, wanted: int, dtype: str, source: soundfile.SoundFile) -> NDArray[Any]:
    """(wanted, channels) as stored."""
    try:
        values: NDArray[Any] = source.read(wanted, dtype=dtype, always_2d=True)
    except RuntimeError as error:
        raise StreamError(f"{file.path}: broken at sample {begin} ({_reason(error)})") from None
    if len(values) != wanted:
        raise StreamError(f"{file.path}: ends at sample {begin + len(values)}; its head says {file.samples}")
    return values
