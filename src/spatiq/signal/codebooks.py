"""All schemes by name, each of them a function that gives a `Codebook`.

To add a scheme: write its function in a file of its own, enter it in `SCHEMES`, give it examples in
spatiq.signal.scheme_examples (the contract suites run over them and fail without), its keys in
spatiq.link.schema and their reading in spatiq.link.modulation_building, and describe it in
link/manual.md.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

from spatiq.signal.codebook import MAX_SETS, Codebook, unpack_words
from spatiq.signal.differential import DifferentialCodebook, differential_spatial_modulation
from spatiq.signal.several_antennas import (
    generalised_space_shift_keying,
    generalised_spatial_modulation,
    quadrature_spatial_modulation,
)
from spatiq.signal.single_antenna import space_shift_keying, spatial_modulation
from spatiq.signal.vector_table import vector_table

SCHEMES: dict[str, Callable[..., Codebook]] = {
    "spatial-modulation": spatial_modulation,
    "space-shift-keying": space_shift_keying,
    "generalised-spatial-modulation": generalised_spatial_modulation,
    "generalised-space-shift-keying": generalised_space_shift_keying,
    "quadrature-spatial-modulation": quadrature_spatial_modulation,
    "differential-spatial-modulation": differential_spatial_modulation,
    "vector-table": vector_table,
}


def registered() -> dict[str, Callable[..., Any]]:
    """All schemes by name."""
    return dict(SCHEMES)


__all__ = [
    "MAX_SETS",
    "SCHEMES",
    "Codebook",
    "DifferentialCodebook",
    "differential_spatial_modulation",
    "generalised_space_shift_keying",
    "generalised_spatial_modulation",
    "quadrature_spatial_modulation",
    "registered",
    "space_shift_keying",
    "spatial_modulation",
    "unpack_words",
    "vector_table",
]
