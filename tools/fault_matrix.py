"""Fault matrix: each fault of a transmitter injected alone; which cause is named first?

    .venv/bin/python tools/fault_matrix.py              20 seeds, 15 and 25 dB
    .venv/bin/python tools/fault_matrix.py --quick      2 seeds (50 s)

Cabled through a combiner to two receive channels, 12 frames, four antennas of equal power, carrier
and clock off at random. The last line is the share named first; exit code 1 when it is below 95 %,
or when a cause is named in more than 1 % of the clean captures.
"""

from __future__ import annotations

import argparse
import sys

from campaign.environment import enter_environment, one_core


def main() -> int:
    parser = argparse.ArgumentParser(description="Causes named for injected faults.")
    parser.add_argument("--quick", action="store_true", help="2 seeds")
    parser.add_argument("--seeds", type=int, default=20, help="seeds per case and SNR")
    arguments = parser.parse_args()
    one_core()
    enter_environment()
    from campaign.fault_table import run

    return run(2 if arguments.quick else arguments.seeds)


if __name__ == "__main__":
    sys.exit(main())
