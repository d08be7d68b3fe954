"""Same samples, settings, library versions and CPU type: the same bits, live or embedded."""

import importlib.util
from pathlib import Path

import pytest

_spec = importlib.util.spec_from_file_location("live_and_embedded", Path(__file__).with_name("live_and_embedded.py"))
live_and_embedded = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(live_and_embedded)


@pytest.mark.parametrize(("block", "pause_s"), [(1000, 0.0), (333, 0.001)])
def test_live_service_gives_the_bits_of_the_pipeline(block, pause_s):
    """Two bands, a gap, a dead hydrophone, a navigation and a positions message; two block lengths and speeds."""
    assert "the same to the bit" in live_and_embedded.check(20.0, block, pause_s)


def test_block_length_does_not_change_the_bits_of_the_maps(tmp_path):
    config = tmp_path / "aft.toml"
    config.write_text(live_and_embedded.SETTINGS.format(store=tmp_path))
    whole = list(live_and_embedded.messages(6.0, 8000))
    maps = {}
    for cut in (8000, 1, 911):
        maps[cut] = live_and_embedded.embedded(config, list(cut_up(whole, cut)))
    for topic in ("map/low", "map/high"):
        for cut in (1, 911):
            assert [data for _, data in maps[cut][topic]] == [data for _, data in maps[8000][topic]]


def cut_up(feed, length):
    """The same samples in blocks of at most this length; other messages stay before the block they stood before."""
    import msgpack
    import numpy as np

    for parts in feed:
        if len(parts) == 1:
            yield parts
            continue
        header = msgpack.unpackb(parts[0])
        values = np.frombuffer(parts[1], "<i2").reshape(header["shape"])
        for start in range(0, values.shape[1], length):
            piece = np.ascontiguousarray(values[:, start : start + length])
            t_ns = header["t"] + round(start * 1e9 / header["rate"])
            new = {**header, "first": header["first"] + start, "t": t_ns, "shape": list(piece.shape)}
            yield [msgpack.packb(new), piece.tobytes()]
