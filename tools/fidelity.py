"""How true are the figures? The receiver against a genie on the same noise, and against the truth.

    python3 tools/fidelity.py            the whole campaign, some minutes
    python3 tools/fidelity.py --quick    a few of its points, within 50 seconds

Prints a table; its last line is the worst ratio of the measured BER to the genie's. Ends with 1
when a bar is missed. Progress goes to standard error.
"""

from __future__ import annotations

import argparse
import sys

from campaign.environment import enter_environment


def main() -> int:
    parser = argparse.ArgumentParser(description="Receiver against a genie, on simulated links.")
    parser.add_argument("--quick", action="store_true", help="a few points, within 50 seconds")
    arguments = parser.parse_args()
    enter_environment()
    from campaign.fidelity_table import run

    return run(quick=arguments.quick)


if __name__ == "__main__":
    sys.exit(main())
