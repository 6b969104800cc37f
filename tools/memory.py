"""How much memory does a long recording take? `spatiq measure` on one of several gigabytes.

    python3 tools/memory.py                      6 GB, in the folder for temporary files
    python3 tools/memory.py --gigabytes 20 --folder /data

Makes the recording, measures it in a process of its own, compiling the kernels as a first use does
(or not: --compiled), and removes it. The last line is the peak of resident memory; ends with 1 when
it is above 500 MB.
"""

from __future__ import annotations

import argparse
import os
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from campaign.environment import enter_environment, spatiq_program

_BAR_MB = 500.0
_SHORT_GIGABYTES = 0.07
_BYTES_PER_SAMPLE = 4  # ci16
# Unix counts in kibibytes, macOS in bytes.
_MAXRSS_BYTES = 1 if sys.platform == "darwin" else 1024


def peak_of(command: list[str], kernels: Path) -> tuple[int, float, float]:
    """Run a command: its exit code, seconds, and peak of resident memory in MB.

    `kernels` is where it keeps its compiled kernels; empty, it compiles them, which takes memory.

    This process must be small: a child counts its parent's memory from before it became itself.
    """
    began = time.monotonic()
    environment = os.environ | {"NUMBA_CACHE_DIR": str(kernels)}
    child = subprocess.Popen(command, env=environment, stdout=subprocess.DEVNULL)
    _, status, usage = os.wait4(child.pid, 0)
    child.returncode = os.waitstatus_to_exitcode(status)
    return child.returncode, time.monotonic() - began, usage.ru_maxrss * _MAXRSS_BYTES / 1e6


def measure_made(folder: Path, gigabytes: float, kernels: Path) -> tuple[int, float, float]:
    """Make a recording and measure it; see `peak_of`."""
    here = Path(__file__).resolve().parent
    maker = [sys.executable, "-m", "campaign.long_recording", str(folder), str(gigabytes)]
    subprocess.run(maker, cwd=here, check=True)
    files = [str(folder / "long.sigmf-meta"), str(folder / "long.link.toml")]
    out = ["--out", str(folder / "long.spatiq.h5"), "--overwrite", "--rows", "0"]
    return peak_of([spatiq_program(), "measure", *files, *out], kernels)


def measure_long(folder: Path, gigabytes: float, compiled: bool) -> int:
    """Make, measure, report; the exit code."""
    kernels = folder / "kernels"
    kernels.mkdir()
    if compiled and (code := measure_made(folder, _SHORT_GIGABYTES, kernels)[0]):
        print(f"spatiq measure ended with {code}")
        return 1
    code, seconds, peak = measure_made(folder, gigabytes, kernels)
    if code:
        print(f"spatiq measure ended with {code}")
        return 1
    size = (folder / "long.sigmf-data").stat().st_size
    samples = size / _BYTES_PER_SAMPLE
    print(f"recording            {size / 1e9:.2f} GB, ci16_le, 2 channels")
    print(f"results              {(folder / 'long.spatiq.h5').stat().st_size / 1e6:.1f} MB")
    print(f"kernels              {'compiled before' if compiled else 'compiled in this run'}")
    print(f"time                 {seconds:.1f} s, whole command")
    print(f"throughput           {samples / seconds / 1e6:.2f} M channel-samples/s, ", end="")
    print(f"{size / seconds / 1e6:.1f} MB/s")
    print(f"bar                  {_BAR_MB:.0f} MB")
    print(f"peak resident memory {peak:.0f} MB")
    return 1 if peak > _BAR_MB else 0


def main() -> int:
    parser = argparse.ArgumentParser(description="Peak memory of measuring a long recording.")
    parser.add_argument("--gigabytes", type=float, default=6.0, help="size of the recording")
    parser.add_argument("--folder", type=Path, help="where it is made; temporary files' otherwise")
    parser.add_argument(
        "--compiled", action="store_true", help="compile the kernels before, on a short recording"
    )
    arguments = parser.parse_args()
    enter_environment()
    with tempfile.TemporaryDirectory(prefix="spatiq-memory-", dir=arguments.folder) as folder:
        return measure_long(Path(folder), arguments.gigabytes, arguments.compiled)


if __name__ == "__main__":
    sys.exit(main())
