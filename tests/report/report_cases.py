"""What the tests of pages share."""

import shutil
from pathlib import Path

import h5py
import numpy as np
from typer.testing import CliRunner

from spatiq.cli.main import app

DEMO = Path(__file__).resolve().parents[2] / "captures_demo" / "hook_yard.link.toml"

# Becomes markup, a request or a running script wherever it is not escaped.
HOSTILE = "</script><script>window.hit=1</script><img src=x onerror=window.hit=2>&amp;"
HOSTILE_FILE = "run <img src=x onerror=window.hit=3>"


def run_spatiq(*arguments, code=0):
    """A run of the program in this process; its output."""
    done = CliRunner().invoke(app, [str(a) for a in arguments])
    assert done.exit_code == code, done.output
    return done.output


def repeated(results, path, frames):
    """A results file with the frames of another again and again, until there are so many."""
    shutil.copyfile(results, path)
    with h5py.File(path, "r+") as file:
        count = file["frames/frame"].shape[0]
        times = -(-frames // count)
        step = float(np.diff(file["frames/time_s"][:]).mean()) * count
        if "symbols" in file:
            del file["symbols"]
        names = []
        file.visititems(lambda n, d: names.append(n) if isinstance(d, h5py.Dataset) else None)
        for name in names:
            data = file[name]
            if name.split("/")[0] in ("lost", "provenance", "summary") or data.ndim == 0:
                continue
            if data.shape[0] != count or name in ("confusion/total", "confusion/antenna_sets"):
                continue
            rows = np.concatenate([data[:]] * times)[:frames]
            if name == "frames/frame":
                rows = np.arange(frames)
            if name == "frames/time_s":
                rows = rows + step * (np.arange(frames) // count)
            attributes = dict(data.attrs)
            del file[name]
            file[name] = rows
            file[name].attrs.update(attributes)
    return path
