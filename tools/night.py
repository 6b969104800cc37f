"""A night of recordings, simulated and measured as a batch, and checked.

    python3 tools/night.py                       300 recordings, one in twenty broken
    python3 tools/night.py --recordings 60 --kills 50
    python3 tools/night.py --recordings 60 --kills 20 --cluster 2
    python3 tools/night.py --splits 100          one recording cut at 100 random places
    python3 tools/night.py --scaling 120         workers and overhead, on recordings of 120 MB

Makes the night in a folder for temporary files (--folder: there, and keeps it). Ends with 1 when
anything is not as it must be.
"""

from __future__ import annotations

import argparse
import sys
import tempfile
from pathlib import Path

from campaign.environment import enter_environment, one_thread


def main() -> int:
    parser = argparse.ArgumentParser(description="A night of recordings, measured and checked.")
    parser.add_argument("--recordings", type=int, default=300)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--folder", type=Path, help="where it is made, and kept")
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--kills", type=int, default=0, help="SIGKILLs at random moments")
    parser.add_argument("--cluster", type=int, default=0, help="Dask workers, killed as well")
    parser.add_argument("--splits", type=int, default=0, help="random cuts of one recording")
    parser.add_argument("--scaling", type=float, default=0, help="MB of a recording")
    arguments = parser.parse_args()
    enter_environment()
    one_thread()
    from campaign.night_checks import check_kills, check_night
    from campaign.night_large import check_scaling, check_splits

    with tempfile.TemporaryDirectory(prefix="spatiq-night-") as temporary:
        folder = arguments.folder or Path(temporary)
        if arguments.splits:
            return check_splits(folder, arguments.splits, arguments.seed)
        if arguments.scaling:
            return check_scaling(folder, arguments.scaling, arguments.seed)
        if arguments.kills:
            return check_kills(folder, arguments)
        return check_night(folder, arguments)


if __name__ == "__main__":
    sys.exit(main())
