"""How long does the very first use wait for the kernels to be compiled?

    python3 tools/first_use.py

Runs `spatiq measure` twice on one capture, the first time with an empty folder for compiled
kernels. The last line is the difference; ends with 1 when it is above 15 seconds.
"""

from __future__ import annotations

import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from campaign.environment import enter_environment, spatiq_program

_BAR_S = 15.0


def timed(command: list[str], kernels: Path) -> tuple[float, float]:
    """Seconds that a command takes with its compiled kernels kept in a folder of one's own: by the
    clock, and of a processor."""
    began, before = time.monotonic(), os.times()
    environment = os.environ | {"NUMBA_CACHE_DIR": str(kernels)}
    subprocess.run(command, env=environment, check=True, stdout=subprocess.DEVNULL)
    after = os.times()
    worked = after.children_user + after.children_system
    worked -= before.children_user + before.children_system
    return time.monotonic() - began, worked


def main() -> int:
    enter_environment()
    here = Path(__file__).resolve().parent
    with tempfile.TemporaryDirectory(prefix="spatiq-first-use-") as name:
        folder = Path(name)
        kernels = folder / "kernels"
        kernels.mkdir()
        # The recording is made with the kernels of everyday use.
        maker = [sys.executable, "-m", "campaign.long_recording", name, "0.07"]
        subprocess.run(maker, cwd=here, check=True)
        files = [str(folder / "long.sigmf-meta"), str(folder / "long.link.toml")]
        out = ["--out", str(folder / "first.h5"), "--overwrite"]
        command = [spatiq_program(), "measure", *files, *out]
        (first, first_work), (second, second_work) = (timed(command, kernels) for _ in range(2))
    print(f"first use   {first:.1f} s, of a processor {first_work:.1f} s")
    print(f"second use  {second:.1f} s, of a processor {second_work:.1f} s")
    print(f"bar         {_BAR_S:.0f} s by the clock")
    print(f"difference  {first - second:.1f} s")
    return 1 if first - second > _BAR_S else 0


if __name__ == "__main__":
    sys.exit(main())
