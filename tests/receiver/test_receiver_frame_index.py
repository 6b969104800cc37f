"""An index of frames made in pieces, wherever they are cut, is that of a single pass; and frames
received in shares of it are those received in one."""

from __future__ import annotations

import numpy as np
import pytest
from received_frames import collect, record
from receiver_cases import IN_TURN, SYNC, make_link, payload_section

from spatiq.receiver import framing
from spatiq.receiver.frame_index import FrameIndexer
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.simulation import simulate

SPS = 4.0
TEXT = SYNC + IN_TURN + payload_section(150)
LENGTH = make_link(sections=TEXT).layout.length
LOOSE = make_link(sections=TEXT)
PERIODIC = make_link(sections=TEXT, frame=f"period_symbols = {LENGTH + 31.5}")
OPTIONS = ReceiverOptions(block_size=4096)
CHOICES = {"receive_channels": 1, "samples_per_symbol": SPS}


def whole(indexer):
    (piece,) = indexer.pieces([])
    return list(indexer.search(piece).finds)


def keys(finds):
    return [(*find.key, find.found.metric, find.entered) for find in finds]


def joined(indexer, cuts):
    pieces = indexer.pieces(cuts)
    return indexer.join(pieces, map(indexer.search, pieces)).finds()


def with_gaps(capture):
    """Samples with two holes, and captures that tell of them: a frame is cut, others are lost."""
    samples = capture.samples()
    n = samples.shape[1]
    one, two = n // 3, 2 * n // 3
    kept = np.concatenate(
        [samples[:, :one], samples[:, one + 700 : two], samples[:, two + 2900 :]], axis=1
    )
    starts = [0, one, two - 700]
    captures = [
        {"core:sample_start": start, "core:global_index": at}
        for start, at in zip(starts, (0, one + 700, two + 2900), strict=True)
    ]
    return kept, captures


def spoiled(capture):
    samples = capture.samples().copy()
    for at in np.linspace(0, samples.shape[1] - 40, 7).astype(int):
        samples[:, at : at + 25] = np.nan
    return samples


def make(tmp_path, kind, link, seed, snr_db=12.0):
    spacing = {"sparse": (100.0, 3000.0), "dense": "back-to-back"}.get(kind, "link")
    choices = CHOICES | {"snr_db": snr_db, "seed": seed, "frames": 24, "spacing": spacing}
    if kind == "spoiled":
        return record(tmp_path, link, spoiled, datatype="cf32_le", **choices)[0]
    if kind == "gaps":
        kept, captures = with_gaps(simulate(link, **choices))
        return record(tmp_path, link, lambda _: kept, captures, **choices)[0]
    return record(tmp_path, link, **choices)[0]


KINDS = [
    ("dense", LOOSE),
    ("sparse", LOOSE),
    ("period", PERIODIC),
    ("gaps", PERIODIC),
    ("spoiled", PERIODIC),
]


@pytest.mark.parametrize(("kind", "link"), KINDS, ids=[k for k, _ in KINDS])
def test_wherever_it_is_cut_the_index_is_that_of_a_single_pass(tmp_path, kind, link):
    recording = make(tmp_path, kind, link, seed=3)
    indexer = FrameIndexer(recording, link, OPTIONS)
    expected = keys(whole(indexer))
    assert len(expected) >= 15
    rng = np.random.default_rng(17)
    for trial in range(12):
        count = 1 + trial % 5
        cuts = np.sort(rng.integers(0, recording.n_samples + 1, count)).tolist()
        assert keys(joined(indexer, cuts)) == expected, cuts
    # Closer than a frame: some pieces are skipped over altogether.
    first = int(recording.n_samples * 0.4)
    cuts = [first + int(i * LENGTH * SPS / 4) for i in range(9)]
    assert keys(joined(indexer, cuts)) == expected


def test_where_pieces_do_not_meet_the_search_goes_on_until_they_do(tmp_path, monkeypatch):
    """Noise passes as a frame again and again: a search that begins elsewhere finds others."""
    options = ReceiverOptions(block_size=4096, false_alarm=3e-4)
    recording = make(tmp_path, "sparse", LOOSE, seed=5)
    indexer = FrameIndexer(recording, LOOSE, options)
    expected = keys(whole(indexer))
    assert len(expected) > 40
    searched = []
    search = FrameIndexer.search
    monkeypatch.setattr(
        FrameIndexer, "search", lambda self, piece: searched.append(piece) or search(self, piece)
    )
    rng = np.random.default_rng(18)
    pieces = 0
    for _ in range(10):
        cuts = np.sort(rng.integers(0, recording.n_samples, 6)).tolist()
        pieces += len(indexer.pieces(cuts))
        assert keys(joined(indexer, cuts)) == expected, cuts
    assert len(searched) > pieces


@pytest.mark.parametrize(("kind", "link"), KINDS, ids=[k for k, _ in KINDS])
@pytest.mark.parametrize("batches", [1, 2])
def test_frames_received_in_shares_are_those_received_in_one(
    tmp_path, monkeypatch, kind, link, batches
):
    monkeypatch.setattr(framing, "_BATCH_FRAMES", 5)
    recording = make(tmp_path, kind, link, seed=4, snr_db=15.0)
    expected = collect(recording, link, OPTIONS)
    indexer = FrameIndexer(recording, link, OPTIONS)
    pieces = indexer.pieces([])
    table = indexer.join(pieces, map(indexer.search, pieces))
    shares = indexer.share(table, batches)
    assert len(shares) >= 2
    parts = [
        collect(recording, link, OPTIONS, stretch=indexer.frames(table, *share)) for share in shares
    ]
    assert [f for part in parts for f in part.lost] == expected.lost
    for name, values in expected.columns.items():
        got = np.concatenate([part.columns[name] for part in parts])
        np.testing.assert_array_equal(got, values, err_msg=name)
