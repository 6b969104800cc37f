"""Rooms with echoes, shared out: the results of a single pass to the bit; options by name."""

from __future__ import annotations

from dataclasses import replace

import pytest
from batch_cases import PRBS, write_capture, write_link
from test_batch_splitting import SMALL_BLOCKS, both_ways, cut_at_random, small_batches

from spatiq.batch.rules import with_options
from spatiq.errors import InputError
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.tapped_delay_line import TappedDelayLine

__all__ = ["small_batches"]  # a fixture that every test here uses
CARRIERS = 'blocks = { form = "multicarrier", length = 24, guard = 12 }\n'


@pytest.mark.parametrize("blocks", ["", CARRIERS], ids=["single carrier", "multicarrier"])
def test_shared_out(tmp_path, monkeypatch, blocks):
    link = write_link(tmp_path, fields=blocks + PRBS)
    room = TappedDelayLine("tdl-a", 0.5)
    meta = write_capture(tmp_path, link, "long", channels=room, frames=16, spacing=(40.0, 90.0))
    cut_at_random(monkeypatch, 3, 4)
    both_ways(tmp_path, meta, link, 3, replace(SMALL_BLOCKS, channel="dispersive"))


@pytest.mark.nojit
def test_options_by_name():
    chosen = {"channel": "dispersive", "memory": 5, "equaliser": "mmse"}
    found = with_options(ReceiverOptions(), chosen, "--set")
    assert (found.channel, found.memory, found.equaliser) == ("dispersive", 5, "mmse")
    for wrong in ("five", 5.5, True, -1, 13):
        with pytest.raises(InputError, match="memory"):
            with_options(ReceiverOptions(), {"memory": wrong}, "--set")
