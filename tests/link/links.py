"""A small link description as tables, to be bent by tests, and a writer of TOML."""

from __future__ import annotations

import copy
import json
import math

from spatiq.link.loading import parse_link

BASE = {
    "format": 1,
    "air": {"antennas": 4, "symbol_rate_hz": 1e6, "carrier_hz": 2e9, "clock": "locked"},
    "modulation": {
        "scheme": "spatial-modulation",
        "constellation": {"name": "QPSK", "labelling": "3gpp"},
        "spatial_bits": "first",
        "antenna_order": [0, 1, 2, 3],
    },
    "pulse": {"shape": "root-raised-cosine", "rolloff": 0.25, "span_symbols": 8},
    "frame": {
        "period_symbols": 300,
        "section": [
            {
                "kind": "sync",
                "sequence": {"type": "m-sequence", "order": 5},
                "antennas": [0],
                "power_db": 0.0,
            },
            {
                "kind": "pilots",
                "sequence": {"type": "zadoff-chu", "length": 8, "root": 3, "cyclic_shift": 1},
                "antennas": [0, 1, 2, 3],
                "send": "together",
                "repeat": 2,
                "cover": [[1, 1], [1, -1], [[0, 1], 1], [1, [0.5, 0]]],
                "antenna_shift": [0, 2, 4, 6],
            },
            {"kind": "silence", "symbols": 4},
            {
                "kind": "payload",
                "symbols": 100,
                "power_db": -2,
                "known": {
                    "every": 10,
                    "first": 3,
                    "sequence": {"type": "list", "symbols": [[1, 0], [0, -1]]},
                    "antennas": [0, 1, 2, 3],
                },
            },
        ],
    },
    "payload": {
        "field": [
            {"type": "counter", "bits": 12, "order": "msb-first", "start": 5},
            {"type": "prbs", "name": "PRBS9", "bits": 100, "continuation": "running"},
            {"type": "fixed", "value": "1100"},
            {"type": "crc", "name": "CRC-16/3GPP", "covers": [0, 1]},
            {"type": "data", "bits": 30},
        ],
        "scrambler": {"type": "additive", "taps": [7, 4], "seed": 93},
    },
}


def base():
    return copy.deepcopy(BASE)


def toml_value(value):
    """A value as inline TOML."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        if math.isnan(value):
            return "nan"
        return repr(value) if math.isfinite(value) else ("inf" if value > 0 else "-inf")
    if isinstance(value, int):
        return str(value)
    if isinstance(value, str):
        # JSON escapes are TOML's, but for DEL, which TOML wants escaped.
        return json.dumps(value).replace("\x7f", "\\u007f")
    if isinstance(value, list):
        return "[" + ", ".join(toml_value(v) for v in value) + "]"
    return "{" + ", ".join(f"{toml_value(k)} = {toml_value(v)}" for k, v in value.items()) + "}"


def toml(tables):
    return "".join(f"{toml_value(k)} = {toml_value(v)}\n" for k, v in tables.items())


def parsed(tables, folder=None):
    return parse_link(toml(tables), "test.link.toml", folder)
