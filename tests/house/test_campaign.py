"""The fidelity campaign: its table can be run, and its genie decides as the definition says."""

from __future__ import annotations

import importlib
import sys
from pathlib import Path

import numpy as np
import pytest

from spatiq.receiver.detection import maximum_likelihood
from spatiq.receiver.options import ReceiverOptions
from spatiq.transmit.scenario import Scenario

TOOLS = Path(__file__).resolve().parents[2] / "tools"


@pytest.fixture
def campaign(monkeypatch):
    """Modules of tools/ by name, as Python finds them when the tool is run."""
    monkeypatch.syspath_prepend(str(TOOLS))
    before = set(sys.modules)
    yield importlib.import_module
    for name in set(sys.modules) - before:
        if name.split(".")[0] in ("campaign", "fidelity", "_setup"):
            sys.modules.pop(name)


def test_sections_are_those_of_the_command_line(campaign):
    assert tuple(campaign("campaign.fidelity_run").SECTIONS) == campaign("fidelity").SECTIONS
    for section in campaign("campaign.fidelity_run").SECTIONS.values():
        quick, whole = section.keys(True), section.keys(False)
        assert quick and set(quick) <= set(whole) and len(set(whole)) == len(whole)


def test_every_impairment_is_one_that_simulation_and_receiver_know(campaign):
    table = campaign("campaign.impairments")
    rows = campaign("campaign.impairment_rows")
    for row in table.IMPAIRMENTS.values():
        link = rows.link_of(row)
        Scenario(samples_per_symbol=row.samples_per_symbol, **row.scenario).check(link)
        Scenario(**{**row.scenario, **(row.clean or {})})
        ReceiverOptions(**row.options)
        assert set(row.clean or {}) <= set(row.scenario)


def test_the_genie_decides_for_the_nearest_codeword(campaign):
    """As the receiver's detector; a moving channel period by period; noise made white."""
    genie, links = campaign("campaign.plain_genie"), campaign("campaign.links")
    book = links.campaign_link(4, "QPSK").codebook
    rng = np.random.default_rng(1)

    def drawn(*shape):
        return rng.standard_normal(shape) + 1j * rng.standard_normal(shape)

    y, channel = drawn(300, 2), drawn(2, 4)
    words = genie.decide(y, channel, book, None)
    np.testing.assert_array_equal(
        words, maximum_likelihood(y.astype(np.complex64), channel, 1, book)
    )
    moving = drawn(300, 2, 4)
    each = [genie.decide(y[k : k + 1], moving[k], book, None)[0] for k in range(300)]
    np.testing.assert_array_equal(genie.decide(y, moving, book, None), each)
    root = drawn(2, 2)
    received = genie.decide(y @ root.T, root @ channel, book, np.linalg.inv(root))
    np.testing.assert_array_equal(received, words)
    assert genie.wrong_bits(np.array([[3, 0], [5, 5]]), np.array([[0, 0], [4, 6]])).tolist() == [
        2,
        3,
    ]


def test_a_row_says_what_it_misses(campaign):
    """A deliberate defect trips each bar of an impairment's row."""
    rows, table = campaign("campaign.impairment_rows"), campaign("campaign.impairments")
    ones = np.ones(100)

    def row(errors, found=ones, bits=4000.0):
        counts = rows.Counts(found, errors, bits * found, 40 * ones, 0.01 * ones, 0)
        return rows.judged("a row", table.Impairment(), 10.0, 4000, [counts])

    fair = row(44 * ones)
    assert fair.faults == () and fair.ber_ratio == pytest.approx(1.1)
    assert row(47 * ones).faults == ("BER",)
    assert row(44 * ones, found=(np.arange(100) >= 2).astype(float)).faults == ("frames",)
    blind = row(0 * ones, bits=0.0)
    assert blind.faults == ("BER",) and blind.ber_ratio is None and blind.compares


def test_interval_of_white_counts_holds_their_rate(campaign):
    """Independent lags: a 95 % interval holds the rate in 90 to 99 % of 400 draws (seed fixed)."""
    interval = campaign("campaign.false_alarm_rows").interval
    rng = np.random.default_rng(3)
    held = 0
    for _ in range(400):
        low, high = interval((rng.random(20_000) < 0.02).astype(float))
        held += low <= 0.02 <= high
    assert 360 <= held <= 396
