"""Run all tests: the whole suite, then its quick part with numba's compiler off.

    python3 tools/test.py              everything
    python3 tools/test.py -k crc -x    arguments go to pytest

Makes the environment .venv first, if there is none. Ends with 0 when both runs pass.
"""

from __future__ import annotations

import os
import subprocess
import sys

from _setup import REPOSITORY, prepare, say

_NOTHING_SELECTED = 5  # pytest's exit code


def main(arguments: list[str]) -> int:
    python = prepare()
    # Matrices are small here: threads of the linear algebra library only get in each other's way.
    os.environ.setdefault("OMP_NUM_THREADS", "1")
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    say("Tests, whole suite:")
    pytest = [python, "-m", "pytest", *arguments]
    whole = subprocess.run(pytest, cwd=REPOSITORY, check=False).returncode
    if whole not in (0, _NOTHING_SELECTED):
        return whole
    say("\nTests marked nojit, once more with numba's compiler off:")
    plain = subprocess.run(
        [*pytest, "-m", "nojit"],
        cwd=REPOSITORY,
        env=os.environ | {"NUMBA_DISABLE_JIT": "1"},
        check=False,
    ).returncode
    if plain == _NOTHING_SELECTED and arguments:
        return whole  # a choice of tests need not contain any of these
    return plain or whole


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
