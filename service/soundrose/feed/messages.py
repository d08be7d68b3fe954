"""codec: the public face of feed messages: values, reading and writing."""

from soundrose.feed.decoding import decode
from soundrose.feed.encoding import encode_end, encode_navigation, encode_positions, encode_pulse, encode_samples
from soundrose.feed.wire import (
    DATA_LIMIT,
    HEADER_LIMIT,
    REASONS,
    VERSION,
    Expected,
    Layout,
    Message,
    RunEndMessage,
    Samples,
    SampleType,
    Unit,
)

__all__ = [
    "DATA_LIMIT",
    "HEADER_LIMIT",
    "REASONS",
    "VERSION",
    "Expected",
    "Layout",
    "Message",
    "RunEndMessage",
    "SampleType",
    "Samples",
    "Unit",
    "decode",
    "encode_end",
    "encode_navigation",
    "encode_positions",
    "encode_pulse",
    "encode_samples",
]
