"""Waveforms against their defining sum, in plain NumPy."""

import numpy as np
import pytest
from transmit_links import RECTANGLE, RRC, make_link

from spatiq.errors import InputError
from spatiq.signal.pulses import explicit_taps, isi_floor, rectangular, root_raised_cosine
from spatiq.transmit.frames import frame_vectors, frame_words, mean_payload_power
from spatiq.transmit.pulse_table import pulse_table
from spatiq.transmit.shaping import FrameStream
from spatiq.transmit.waveform import transmit_waveform

PULSES = [
    root_raised_cosine(0.25, 12),
    root_raised_cosine(0.5, 7.3),
    rectangular(),
    explicit_taps(np.hanning(17), 4),
]


def defining_sum(link, numbers, starts, sps, clock_ppm, n):
    """r[n] = sum_k x_k p((n - t0 - k spacing) / spacing) / sqrt(sps), in double precision."""
    spacing = sps * (1 + clock_ppm * 1e-6)
    vectors = frame_vectors(link, np.asarray(numbers))
    out = np.zeros((link.antennas, n), np.complex128)
    for frame, start in zip(vectors, starts, strict=True):
        for k, vector in enumerate(frame):
            times = (np.arange(n) - start - k * spacing) / spacing
            out += vector[:, None] * link.pulse.samples(times, sps) / np.sqrt(sps)
    return out


def joined(blocks):
    return np.concatenate(list(blocks), axis=1)


@pytest.mark.parametrize("pulse", PULSES, ids=lambda p: p.name)
@pytest.mark.parametrize("sps", [1.0, 1.7, 4.0, 4.137, 25.0])
def test_table_interpolates_to_better_than_100_db(pulse, sps):
    """The promise of the table, measured at fractions that it was not built from."""
    table = pulse_table(pulse, sps)
    phases = len(table.rows) - 1
    fractions = np.random.default_rng(1).uniform(0, 1, 200)
    row = (fractions * phases).astype(int)
    weight = (fractions * phases - row)[:, None]
    between = (1 - weight) * table.rows[row] + weight * table.rows[row + 1]
    times = np.arange(table.rows.shape[1]) - table.before - fractions[:, None]
    exact = pulse.samples(times / sps, sps) / np.sqrt(sps)
    error = np.where(np.abs(times) <= table.reach, between - exact, 0)
    worst = np.max(np.sum(error**2, axis=1)) / np.sum(table.rows[0].astype(float) ** 2)
    assert worst < 1e-10
    assert table.error_db < -100


@pytest.mark.nojit
@pytest.mark.parametrize(("sps", "clock_ppm"), [(4.0, 0.0), (2.37, 300.0), (7.9, -40.0)])
@pytest.mark.parametrize("pulse", [RRC, RECTANGLE])
def test_waveform_is_the_defining_sum(pulse, sps, clock_ppm):
    """Kernel against plain sum; 1e-6 of the peak is single precision with room to spare."""
    link = make_link(pulse=pulse, payload=6)
    numbers = [5, 6]
    length = link.layout.length * sps
    starts = [20 * sps + 0.31, 20 * sps + 0.77 + length * 1.01]
    made = joined(transmit_waveform(link, numbers, starts, sps, clock_ppm=clock_ppm))
    expected = defining_sum(link, numbers, starts, sps, clock_ppm, made.shape[1])
    assert np.max(np.abs(expected)) > 0.3
    np.testing.assert_allclose(made, expected, atol=1e-6)
    later = defining_sum(link, numbers, starts, sps, clock_ppm, made.shape[1] + 50)
    assert not np.any(later[:, made.shape[1] :]), "the waveform ends before the last pulse does"


def test_frames_far_out_keep_their_instants():
    """A frame at sample 1e9 + 0.25 is the frame at 100.25: instants are in double precision."""
    link = make_link()
    near = joined(transmit_waveform(link, [3], [100.25], 4))
    table = pulse_table(link.pulse, 4)
    stream = FrameStream(
        table=table,
        starts=np.array([1e9 + 0.25]),
        periods=link.layout.length,
        depth=link.antennas,
        symbols=lambda first, stop: frame_vectors(link, np.array([3])).astype(np.complex64),
        steps=np.zeros(1),
        angles=np.zeros(1),
    )
    far = stream.chunk(10**9 - 100, near.shape[1])
    np.testing.assert_allclose(far, near, atol=2e-6)


@pytest.mark.parametrize("block_size", [1, 97, 1000, 1 << 20])
def test_blocks_do_not_change_samples(block_size):
    link = make_link()
    starts = [50.5, 700.25]
    blocks = list(transmit_waveform(link, [0, 1], starts, 4, block_size=block_size))
    assert all(block.shape[1] == block_size for block in blocks[:-1])
    whole = joined(transmit_waveform(link, [0, 1], starts, 4))
    assert np.array_equal(joined(blocks), whole)


def test_energy_is_that_of_the_symbols():
    """Parseval: band-limited pulses of unit energy, far fewer than one sample per symbol apart.

    Energy = sum |x_k|^2 but for the truncated pulse's intersymbol interference (its floor is -49 dB
    for roll-off 0.25, span 8; longer here), which adds less than 1 %.
    """
    link = make_link(payload=400)
    made = joined(transmit_waveform(link, [0], [60.3], 3.3))
    sent = np.sum(np.abs(frame_vectors(link, np.array([0]))) ** 2)
    assert np.sum(np.abs(made) ** 2) == pytest.approx(sent, rel=0.01)


def test_spectrum_stays_within_the_pulse_bandwidth():
    """All antennas together: less than -40 dB of the power beyond (1 + roll-off) / 2.

    Each antenna alone is an on-off stream of pulses; shaping is linear, so it has the same bound.
    The pulse's own truncation at 16 symbols leaves about -45 dB outside.
    """
    link = make_link(payload=2000)
    made = joined(transmit_waveform(link, [0], [80.0], 4))
    spectrum = np.sum(np.abs(np.fft.fft(made, axis=1)) ** 2, axis=0)
    frequency = np.abs(np.fft.fftfreq(made.shape[1])) * 4
    outside = np.sum(spectrum[frequency > 1.25 / 2 * 1.02]) / np.sum(spectrum)
    assert outside < 1e-4


def test_matched_filter_gives_the_symbols_back():
    """Intersymbol interference at the pulse's own floor (isi_floor), any fractional start."""
    link = make_link(payload=300)
    sps, start = 4.0, 70.0
    made = joined(transmit_waveform(link, [0], [start], sps)).astype(complex)
    vectors = frame_vectors(link, np.array([0]))[0]
    n = np.arange(made.shape[1])
    got = np.array(
        [
            made @ link.pulse.samples((n - start - k * sps) / sps, sps) / np.sqrt(sps)
            for k in range(len(vectors))
        ]
    )
    error = np.sum(np.abs(got - vectors) ** 2) / np.sum(np.abs(vectors) ** 2)
    floor = isi_floor(link.pulse, sps)
    assert 10 * np.log10(error) == pytest.approx(floor, abs=1.5)


@pytest.mark.nojit
def test_frames_carry_known_symbols_and_words():
    link = make_link(antennas=4, constellation="16QAM", payload=20)
    numbers = np.arange(7, 10)
    vectors = frame_vectors(link, numbers)
    words = frame_words(link, numbers)
    assert vectors.shape == (3, link.layout.length, 4)
    assert np.array_equal(vectors[:, :31], np.repeat(link.layout.known[None, :31], 3, axis=0))
    assert np.array_equal(vectors[:, 31:], link.codebook.vectors[words])
    assert mean_payload_power(link) == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("choices", "message"),
    [
        ({"starts": [5.0]}, "one per frame"),
        ({"starts": [9.0, 5.0]}, "ascending"),
        ({"starts": [5.0, np.nan]}, "not finite"),
        ({"samples_per_symbol": 0.5}, "samples per symbol"),
        ({"samples_per_symbol": np.nan}, "samples per symbol"),
        ({"clock_ppm": 1e5}, "clock offset"),
    ],
)
def test_bad_arguments_are_refused(choices, message):
    link = make_link()
    given = {"frame_numbers": [0, 1], "starts": [5.0, 900.0], "samples_per_symbol": 4.0, **choices}
    with pytest.raises(InputError, match=message):
        transmit_waveform(link, **given)
