"""A source whose message is larger than any may be loses its connection, and nobody else does."""

from pathlib import Path

import msgpack
import zmq
from rig import ArrayModel, Block, Service, block_message, encode_samples, sensor_noise

ARRAY = ArrayModel(channels=8)
TOO_LARGE = 97 * 2**20
NOISE = encode_samples(sensor_noise(8, 1000, 8000.0, 90.0) / ARRAY.full_scale_upa, "i2", "channel")


def test_frame_over_the_limit_cuts_that_connection_alone(tmp_path: Path) -> None:
    context = zmq.Context()
    bad = context.socket(zmq.PUSH)
    bad.setsockopt(zmq.LINGER, 0)
    bad.setsockopt(zmq.RECONNECT_IVL, -1)
    with (
        Service(ARRAY.settings(ARRAY.band(beams=17)), tmp_path) as service,
        service.listener() as listener,
        service.feeder(queue=64) as feeder,
    ):
        bad.connect(service.ready["feed"])
        for number in range(4):
            feeder.send(
                block_message(ARRAY, Block(number * 1000, 1000, 10**18 + number * 125_000_000, NOISE), "a", type="i2")
            )
        listener.wait_status("the first blocks", lambda s: s["blocks"] == 4)
        assert listener.of("status")[-1].header["disconnects"] == 0
        bad.send_multipart([msgpack.packb({"v": 1, "kind": "samples"}), bytes(TOO_LARGE)])
        listener.wait_status("a cut connection", lambda s: s["disconnects"] == 1)
        for number in range(4, 8):
            feeder.send(
                block_message(ARRAY, Block(number * 1000, 1000, 10**18 + number * 125_000_000, NOISE), "a", type="i2")
            )
        status = listener.wait_status("all blocks", lambda s: s["blocks"] == 8)
        assert (status["gaps"], status["disconnects"], sum(status["dropped"].values())) == (0, 1, 0)
    bad.close()
    context.term()
