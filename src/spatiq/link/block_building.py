"""Blocks of a checked payload section."""

from __future__ import annotations

import numpy as np

from spatiq.link.blocks import MULTICARRIER, ZERO_PADDING, BlockRun
from spatiq.link.places import Place
from spatiq.link.schema_frame import PayloadSection


def block_run(table: PayloadSection, block: int, place: Place) -> BlockRun:
    """The blocks of a payload section that has some, as if it were the frame's first section.

    Args:
        table: the checked table.
        block: periods that a word takes.
        place: where it stands.

    Raises:
        InputError: settings that do not go together.
    """
    blocks = table.blocks
    assert blocks is not None
    inside = place / "blocks"
    if block > 1:
        raise inside.fault("a table", "none: in differential form blocks follow blocks")
    if table.known is not None:
        raise (place / "known").fault("a table", "none beside blocks")
    length = blocks.length
    if table.symbols % length:
        expected = f"a multiple of the blocks' length, {length}"
        raise (place / "symbols").fault(table.symbols, expected)
    if blocks.form != ZERO_PADDING and blocks.guard > length:
        raise (inside / "guard").fault(blocks.guard, f"at most the blocks' length, {length}")
    slots = list(range(length))
    if blocks.form == MULTICARRIER:
        slots = blocks.subcarriers or list(range(1, length))
        if sorted(set(slots)) != slots or slots[-1] >= length:
            expected = f"different subcarriers in ascending order, 0 to {length - 1}"
            raise (inside / "subcarriers").fault("another list", expected)
    elif blocks.subcarriers is not None:
        raise (inside / "subcarriers").fault("a list", 'none: form = "multicarrier" only')
    count = table.symbols // length
    return BlockRun(blocks.form, 0, count, length, blocks.guard, np.array(slots, np.int64))


def blocks_text(run: BlockRun) -> str:
    """Blocks in a few words."""
    what = f"{run.count} blocks of {run.length}, {run.form.replace('-', ' ')}"
    if run.form == MULTICARRIER:
        return f"{what}, {run.slots.size} subcarriers with a word each, prefix {run.guard}"
    return f"words of payload, {what} of {run.guard}"
