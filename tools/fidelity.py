"""How true are the figures? The receiver against published bounds, a genie, and the truth.

    python3 tools/fidelity.py                        the whole campaign, under half an hour
    python3 tools/fidelity.py --quick                a few rows of each section, within 50 seconds
    python3 tools/fidelity.py --section impairments --section floor [--row "IQ"]

Prints a table for each section: misses, false alarms, estimators against their bounds, the floor of
the chain, impairments, plain links and all schemes against a genie. The last line is the worst
ratio of the measured BER to the genie's. Ends with 1 when a bar is missed. Progress goes to
standard error.
"""

from __future__ import annotations

import argparse
import os
import sys

from campaign.environment import enter_environment

SECTIONS = ("misses", "false-alarms", "estimators", "floor", "impairments", "links", "family")


def main() -> int:
    parser = argparse.ArgumentParser(description="Receiver against bounds, genie and truth.")
    parser.add_argument("--quick", action="store_true", help="a few rows, within 50 seconds")
    parser.add_argument("--section", action="append", choices=SECTIONS, help="only this section")
    parser.add_argument("--row", default="", metavar="TEXT", help="only rows named like this")
    arguments = parser.parse_args()
    enter_environment()
    for name in ("OMP", "OPENBLAS", "MKL", "NUMEXPR", "NUMBA"):
        os.environ[f"{name}_NUM_THREADS"] = "1"  # rows are spread over processes instead
    from campaign.fidelity_run import run

    return run(arguments.section or [], arguments.quick, arguments.row)


if __name__ == "__main__":
    sys.exit(main())
