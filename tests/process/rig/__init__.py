"""What the outside tests are made of; it speaks the published contract and imports nothing of the service."""

from rig.arrays import ArrayModel, line_positions, tapered_weights
from rig.beams import ExactMap, half_power_width, pattern_db, peak_cosine
from rig.framing import FramedMap, Stretch, frame_maps, join_blocks
from rig.listener import Listener, Message
from rig.service import Service, free_ports, http_get, processes_marked, run_command, wait_until
from rig.toml_text import toml_text
from rig.waves import Wave, noise_spectrum, plane_wave, sensor_noise
from rig.wire import Block, Feeder, block_message, cut_blocks, encode_samples, note

__all__ = [
    "ArrayModel", "Block", "ExactMap", "Feeder", "FramedMap", "Listener", "Message", "Service", "Stretch", "Wave",
    "block_message", "cut_blocks", "encode_samples", "frame_maps", "free_ports", "half_power_width", "http_get",
    "join_blocks", "line_positions", "noise_spectrum", "note", "pattern_db", "peak_cosine", "plane_wave",
    "processes_marked", "run_command", "sensor_noise", "tapered_weights", "toml_text", "wait_until",
]  # fmt: skip
