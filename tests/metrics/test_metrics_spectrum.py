"""Inverted spectra: recognised by what the payload is known to hold, received, told."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from spatiq.errors import InputError
from spatiq.link.loading import parse_link
from spatiq.metrics.frame_table import Mark
from spatiq.metrics.measuring import measure
from spatiq.metrics.spectrum import conjugate_error_share, look_both_ways
from spatiq.metrics.summary import Summary
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording import open_recording
from spatiq.recording.writing import write_recording
from spatiq.transmit.inversion import SpectralInversion
from spatiq.transmit.simulation import simulate

LINK = """
format = 1
[air]
antennas = 2
symbol_rate_hz = 1e6
[modulation]
scheme = "spatial-modulation"
constellation = { name = "QPSK" }
[pulse]
shape = "root-raised-cosine"
rolloff = 0.25
span_symbols = 24
[[frame.section]]
kind = "sync"
sequence = SYNC
antennas = [0]
[[frame.section]]
kind = "pilots"
sequence = { type = "zadoff-chu", length = 17, root = 3 }
send = "in-turn"
antennas = [0, 1]
[[frame.section]]
kind = "payload"
symbols = 300
[payload]
PAYLOAD
"""
M_SEQUENCE = '{ type = "m-sequence", order = 6 }'
ZADOFF_CHU = '{ type = "zadoff-chu", length = 63, root = 5 }'
PRBS = '[[payload.field]]\ntype = "prbs"\nname = "PRBS15"\nbits = "rest"\n'
CHECKED = (
    '[[payload.field]]\ntype = "data"\nbits = 884\n[[payload.field]]\ntype = "crc"\n'
    'name = "CRC-16/1021-FFFF"\n'
)
DATA = '[[payload.field]]\ntype = "data"\nbits = "rest"\n'


def made_link(sync=M_SEQUENCE, payload=PRBS):
    return parse_link(LINK.replace("SYNC", sync).replace("PAYLOAD", payload))


def recorded(folder, link, inverted=True, frames=12, **choices):
    impairments = [SpectralInversion()] if inverted else []
    capture = simulate(
        link, receive_channels=2, snr_db=18.0, samples_per_symbol=4.0, frames=frames, seed=2,
        cfo_hz=(-8e3, 8e3), impairments=impairments, **choices,
    )  # fmt: skip
    written = write_recording(
        folder / "capture", capture.samples(), sample_rate=capture.sample_rate
    )
    return open_recording(written.meta_path), capture


def summarised(recording, link, options=None):
    summary = Summary(link)
    for measured in measure(recording, link, options):
        summary.add(measured)
    return summary.as_dict()


@pytest.mark.nojit
def test_share_of_bits_that_conjugation_gets_wrong():
    """Gray QPSK: one of two symbol bits tells the quadrature; keyed shifts are real."""
    assert conjugate_error_share(made_link()) == pytest.approx(1 / 3)
    keyed = LINK.replace("spatial-modulation", "space-shift-keying")
    keyed = keyed.replace('constellation = { name = "QPSK" }\n', "").replace("SYNC", M_SEQUENCE)
    real = parse_link(keyed.replace("PAYLOAD", PRBS))
    assert conjugate_error_share(real) == 0.0


@pytest.mark.nojit
def test_share_of_the_differential_form():
    """QPSK, two antennas: of 1 + 2 x 2 bits, a quarter turn's 01 and 10 change places: 2 in 5."""
    text = LINK.replace("spatial-modulation", "differential-spatial-modulation")
    link = parse_link(text.replace("SYNC", M_SEQUENCE).replace("PAYLOAD", PRBS))
    assert conjugate_error_share(link) == pytest.approx(2 / 5)


@pytest.mark.parametrize("sync", [M_SEQUENCE, ZADOFF_CHU])
@pytest.mark.parametrize("payload", [PRBS, CHECKED])
def test_an_inverted_recording_is_received_as_if_it_were_not(tmp_path, sync, payload):
    """A real sync section is found either way; a complex one only in the right spectrum."""
    link = made_link(sync, payload)
    recording, capture = recorded(tmp_path, link)
    found = summarised(recording, link)
    assert found["spectrum"] == "inverted"
    assert found["frames"]["found"] == 12
    assert found["marks"]["SPECTRUM_INVERTED"] == 12
    if payload == PRBS:
        assert found["ber"]["value"] < 0.02
    else:
        assert found["crc"]["passed"] > 6
    # The carrier offset is that on the air, not that of the recording.
    assert found["cfo_hz"]["mean"] == pytest.approx(np.mean(capture.truth.cfo_hz), abs=200.0)
    (tmp_path / "plain").mkdir()
    plain, _ = recorded(tmp_path / "plain", link, inverted=False)
    same = summarised(plain, link)
    assert same["spectrum"] == "normal"
    assert same["ber"] == found["ber"] and same["crc"] == found["crc"]


def test_the_spectrum_can_be_ordered(tmp_path):
    link = made_link()
    recording, _ = recorded(tmp_path, link)
    wrong = summarised(recording, link, ReceiverOptions(spectrum="normal"))
    assert wrong["spectrum"] == "normal" and not (wrong["ber"] or {"value": 1.0})["value"] < 0.1
    right = summarised(recording, link, ReceiverOptions(spectrum="inverted"))
    assert right["spectrum"] == "inverted" and right["ber"]["value"] < 0.02
    with pytest.raises(InputError, match="auto, normal, inverted"):
        ReceiverOptions(spectrum="mirrored")


def test_nothing_is_claimed_where_nothing_can_be_told(tmp_path):
    """Unknown payload behind a real sync section, frames found: received as it came."""
    link = made_link(payload=DATA)
    recording, _ = recorded(tmp_path, link)
    assert summarised(recording, link)["spectrum"] == "normal"


def test_a_poor_recording_is_not_taken_for_an_inverted_one(tmp_path):
    """At 2 dB hardly a CRC is right: neither look convinces."""
    link = made_link(payload=CHECKED)
    capture = simulate(
        link, receive_channels=2, snr_db=2.0, samples_per_symbol=4.0, frames=30, seed=4
    )
    written = write_recording(
        tmp_path / "capture", capture.samples(), sample_rate=capture.sample_rate
    )
    found = summarised(open_recording(written.meta_path), link)
    assert found["crc"]["passed"] == 0 and found["spectrum"] == "normal"


@pytest.mark.nojit
@pytest.mark.parametrize(
    ("normal", "inverted", "expected"),
    [(0, 9, "inverted"), (0, 1, "normal"), (1, 9, "normal"), (0, 0, "normal")],
)
def test_the_second_look_is_believed_only_when_it_convinces(normal, inverted, expected):
    """Ten frames with a CRC of 16 bits: one confirmed by chance in 6,500 recordings is no proof,
    two are; and one confirmed frame in the normal spectrum ends the doubt."""
    link = made_link(payload=CHECKED)
    looked = []

    def look(spectrum):
        looked.append(spectrum)
        confirmed = normal if spectrum == "normal" else inverted
        crc = np.zeros(10, np.int8)
        crc[:confirmed] = 1
        yield dataclasses.make_dataclass("Frames", ["columns", "count", "spectrum"])(
            {"crc_ok": crc}, 10, spectrum
        )

    (chosen,) = look_both_ways(look, link)
    assert chosen.spectrum == expected
    assert looked == (["normal"] if normal else ["normal", "inverted"])
    assert Mark.SPECTRUM_INVERTED == 16384
