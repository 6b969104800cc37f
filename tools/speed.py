"""How fast is it? Measuring against a fast Fourier transform, there and back, of the same samples.

    python3 tools/speed.py            medians of eleven turns
    python3 tools/speed.py --quick    of three, two kinds of recording, within 50 seconds

The last line is the ratio: of the slowest recording, for measuring and keeping the results. Ends
with 1 when it is above 10. One process on one core; recordings are simulated into a temporary
folder.
"""

from __future__ import annotations

import argparse
import sys

from campaign.environment import enter_environment, one_core


def main() -> int:
    parser = argparse.ArgumentParser(description="Measuring against a Fourier transform pass.")
    parser.add_argument("--quick", action="store_true", help="three turns, within 50 seconds")
    arguments = parser.parse_args()
    enter_environment()
    one_core()
    from campaign.speed_table import run

    return run(quick=arguments.quick)


if __name__ == "__main__":
    sys.exit(main())
