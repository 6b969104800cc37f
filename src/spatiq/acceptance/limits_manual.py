"""limits.md, the manual of the limits file: made from the tables that the program itself reads.

python -m spatiq.acceptance.limits_manual      writes limits.md anew
"""

from __future__ import annotations

from pathlib import Path

from spatiq.acceptance.document import RULE
from spatiq.acceptance.figure_kinds import KINDS, NOT_YET

MANUAL = Path(__file__).with_name("limits.md")

_HEAD = f"""# Limits file (*.limits.toml)

TOML 1.0, UTF-8. `starter.limits.toml` beside this page is one to copy.

| key | meaning |
| --- | --- |
| `format` | 1; required |
| `name` | for the report |
| `confidence` | level of all intervals and of the verdict, 0.5 to 0.9999; 0.95 when left out |
| `snr_db` | SNR at which `predicted_ber_at_snr` is predicted |
| `[[adjacent]]` | an adjacent channel: `name`, `offset_hz` from the carrier, `bandwidth_hz` |
| `[[limit]]` | one bound; at least one |

A `[[limit]]`:

| key | meaning |
| --- | --- |
| `figure` | a name of the table below; required |
| `lower`, `upper` | bounds in the figure's unit; at least one |
| `antenna` | one antenna by its number, or "each"; left out: the figure over all antennas |
| `channel` | an adjacent channel by name; left out: all of them |
| `source` | where the bound comes from |

Verdict: {RULE}.
On all limits: not accepted if one is; accepted if all are; else undecided. A figure that a limit
asks for and that could not be measured leaves the verdict undecided. For a single undecided figure,
the number of frames is told whose interval would probably clear the bound.

"""


def _yet(name: str) -> str:
    return "; not measured yet" if name in NOT_YET else ""


def manual() -> str:
    """The page."""
    rows = ["| figure | unit | of | meaning |", "| --- | --- | --- | --- |"]
    rows += [f"| `{k.name}` | {k.unit} | {k.scope} | {k.meaning}{_yet(k.name)} |" for k in KINDS]
    return _HEAD + "\n".join(rows) + "\n"


if __name__ == "__main__":
    MANUAL.write_text(manual(), encoding="utf-8")
