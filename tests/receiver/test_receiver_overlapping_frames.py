"""A second transmitter's frame over one of the link's own: the one hit is marked, no other harmed.

The frame that begins first is the one received; the stronger one that begins within it is not
looked for.
"""

from __future__ import annotations

import numpy as np
import pytest
from receiver_cases import IN_TURN, SYNC, make_link, payload_section
from torn_frames import measured

from spatiq.transmit.second_transmitter import OtherTransmitter

TEXT = SYNC + IN_TURN + payload_section(600)
LENGTH = make_link(sections=TEXT).layout.length
PERIOD = 3 * LENGTH
CHOICES = {
    "receive_channels": 2, "snr_db": 20.0, "samples_per_symbol": 4.0, "frames": 6, "seed": 3,
    "channels": np.array([[1.0, 0.5j], [-0.4 + 0.3j, 1.1]]),
}  # fmt: skip


@pytest.mark.parametrize("power_db", [6.0, 12.0])
@pytest.mark.parametrize("periodic", [False, True])
def test_one_frame_hit_is_marked_and_the_others_are_as_without(tmp_path, power_db, periodic):
    frame = f"period_symbols = {PERIOD}" if periodic else ""
    link = make_link(sections=TEXT, frame=frame)
    choices = CHOICES | {"spacing": "link" if periodic else float(PERIOD - LENGTH)}
    other = OtherTransmitter(
        seed=5,
        delay=2 * PERIOD + 0.5 * LENGTH,
        power_db=power_db,
        frames=1,
        spacing=choices["spacing"],
        channels=np.array([[0.6, 1j], [1.0, -0.7 + 0.5j]]),
    )
    clean = measured(tmp_path, link, **choices)
    hit = measured(tmp_path, link, others=(other,), **choices)
    assert hit.columns["marks"][2] and hit.columns["bit_errors"][2] > 100
    assert hit.lost == [] and hit.words.shape == clean.words.shape
    others = [0, 1, 3, 4, 5]
    np.testing.assert_array_equal(hit.words[others], clean.words[others])
    for name, values in clean.columns.items():
        np.testing.assert_array_equal(hit.columns[name][others], values[others], err_msg=name)
