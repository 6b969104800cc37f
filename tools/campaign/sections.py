"""What a section of the fidelity campaign is.

To add one: a file with a `SECTION`, entered in fidelity_run.py. Its rows are measured in worker
processes, which are told the section's name and the row's: a row must not depend on others.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field


@dataclass(frozen=True)
class Row:
    """A measured row.

    Attributes:
        text: what is printed, one line or more.
        faults: bars that it misses.
        ber_ratio: BER over the genie's, where that is what the row measures and could be measured.
        compares: whether that is what the row measures.
    """

    text: str
    faults: tuple[str, ...] = field(default=())
    ber_ratio: float | None = None
    compares: bool = False

    def line(self) -> str:
        """The text, and what is missed."""
        return self.text + (f"  MISSED: {', '.join(self.faults)}" if self.faults else "")


@dataclass(frozen=True)
class Section:
    """A section: its name, what its rows show and are held against, and how a row is measured.

    Attributes:
        name: as chosen on the command line.
        heading: printed above the rows: figures, bars, sources, columns.
        keys: names of the rows, for the quick campaign or the whole one.
        measure: a row, from its name and whether the campaign is the quick one.
    """

    name: str
    heading: str
    keys: Callable[[bool], tuple[str, ...]]
    measure: Callable[[str, bool], Row]
