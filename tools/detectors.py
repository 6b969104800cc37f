"""What do detectors cost? Real multiplications and time per symbol period, by Nt, Nr and M.

    .venv/bin/python tools/detectors.py            the whole table
    .venv/bin/python tools/detectors.py --quick    half of it, within 20 seconds

Counted are the loops of this program's detectors, per period; what is done once a frame (products
of channel and words, decompositions) is not. Beside them the formulas of the literature for the
plain search. Times are medians on one core: compare them within a row.
"""

from __future__ import annotations

import argparse
import sys

from campaign.environment import enter_environment, one_core


def main() -> int:
    parser = argparse.ArgumentParser(description="Cost of detectors.")
    parser.add_argument("--quick", action="store_true", help="half of the rows")
    arguments = parser.parse_args()
    one_core()
    enter_environment()
    from campaign.detector_table import run

    return run(quick=arguments.quick)


if __name__ == "__main__":
    sys.exit(main())
