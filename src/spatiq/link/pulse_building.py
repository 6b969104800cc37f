"""Pulse of a checked link description."""

from __future__ import annotations

from spatiq.link import schema
from spatiq.link.places import Place
from spatiq.signal import pulses
from spatiq.signal.pulses import Pulse


def pulse(table: schema.PulseTable, place: Place) -> Pulse:
    """The pulse.

    Raises:
        InputError: what makes no pulse, such as taps that are all zero.
    """
    with place.reporting():
        if isinstance(table, schema.RootRaisedCosine):
            return pulses.root_raised_cosine(table.rolloff, table.span_symbols)
        if isinstance(table, schema.Tapped):
            return pulses.explicit_taps(table.taps, table.samples_per_symbol)
        return pulses.rectangular()
