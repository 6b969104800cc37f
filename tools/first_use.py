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


def timed(command: list[str], kernels: Path) -> float:
    """Seconds that a command takes with its compiled kernels kept in a folder of one's own."""
    began = time.monotonic()
    environment = os.environ | {"NUMBA_CACHE_DIR": str(kernels)}
    subprocess.run(command, env=environment, check=True, stdout=subprocess.DEVNULL)
    return time.monotonic() - began


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
        times = [timed(command, kernels) for _ in range(2)]
    print(f"first use   {times[0]:.1f} s")
    print(f"second use  {times[1]:.1f} s")
    print(f"bar         {_BAR_S:.0f} s")
    print(f"difference  {times[0] - times[1]:.1f} s")
    return 1 if times[0] - times[1] > _BAR_S else 0


if __name__ == "__main__":
    sys.exit(main())
