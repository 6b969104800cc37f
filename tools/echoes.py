"""What does estimating cost in rooms with echoes? The receiver against a genie with its detector.

    python3 tools/echoes.py            all points, some minutes
    python3 tools/echoes.py --quick    two points with fewer frames, about a minute

Prints a table; its last line is the largest loss in dB. Ends with 1 when a bar is missed. Progress
goes to standard error.
"""

from __future__ import annotations

import argparse
import sys

from campaign.environment import enter_environment


def main() -> int:
    parser = argparse.ArgumentParser(description="Dispersive reception against a genie.")
    parser.add_argument("--quick", action="store_true", help="two points, about a minute")
    arguments = parser.parse_args()
    enter_environment()
    from campaign.echo_rows import run

    return run(quick=arguments.quick)


if __name__ == "__main__":
    sys.exit(main())
