"""The integrator's page names every key and word that the program sends or takes."""

import re
from pathlib import Path

import numpy as np
import pytest

from soundrose.beam.stage import BandStage
from soundrose.feed.hop import Hop
from soundrose.feed.intake import snapshot_facts
from soundrose.feed.wire import LAYOUTS, NUMBERS, REASONS, UNITS
from soundrose.scene.scene_file import shipped
from soundrose.settings import load_settings
from soundrose.status import BandBook, status_header

PAGE = (Path(__file__).parent.parent / "docs" / "messages.md").read_text("utf-8")
NAMED = {word.strip('"') for word in re.findall(r"`([^`]+)`", PAGE)}


@pytest.mark.parametrize("word", [*REASONS, *NUMBERS, *LAYOUTS, *UNITS, "i2", "i3", "i4", "f4", "heading_from", "of"])
def test_every_word_of_the_feed_is_on_the_page(word):
    assert word in NAMED


def test_reasons_stand_in_the_order_in_which_they_are_judged():
    table = PAGE[PAGE.index("| reason |") :]
    places = [re.search(rf"`{reason}`", table).start() for reason in REASONS]
    assert places == sorted(places)


def test_every_key_of_status_is_on_the_page():
    band = BandBook().entry(up=True, running=True, now=0.0, patience_s=1.0)
    header = status_header(
        state="waiting",
        service_start=0,
        feed=snapshot_facts(b"") | {"disconnects": 0},
        processes=[],
        bands={"main": band},
    )
    missing = {key for key in [*header, *band, *header["latency_ms"]] if key not in NAMED}
    assert not missing


def test_every_key_of_a_map_is_on_the_page():
    settings = load_settings(shipped("demo-settings.toml"))
    band = settings.bands[0]
    channels = settings.array.channels
    samples = np.zeros((channels, band.frame), np.float32)
    hop = Hop("r", 0, 0, np.array([[0, 0]]), samples, np.zeros(channels, bool), np.zeros(channels, np.int32))
    product = BandStage(settings, band).push(hop)[0]
    missing = {key for key in [*product.header, *product.header["limits"]] if key not in NAMED}
    assert not missing
