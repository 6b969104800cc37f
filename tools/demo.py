"""Measure every recording in captures_demo/ and compare with what is expected of it.

    python3 tools/demo.py

Makes the environment .venv first, if there is none. Results go to out/. Ends with 0 when every
figure is as expected, else 1.

A recording NAME.sigmf-meta is measured with NAME.link.toml. NAME.expected.json says what should
come out of it; figures have their names in the summary, dots between:

    {"about": "a line of text",
     "figures": {"ber.errors": {"equals": 0},
                 "snr_db.mean": {"from": 19.5, "to": 20.5},
                 "predicted_ber": {"missing": true}}}
"""

from __future__ import annotations

import json
import subprocess
import sys
from pathlib import Path
from typing import Any

from _setup import REPOSITORY, prepare, program, say

_ENDING = ".sigmf-meta"


def figure(summary: dict[str, Any], name: str) -> Any:
    """Figure of a summary by its dotted name; None when it is missing."""
    value: Any = summary
    for key in name.split("."):
        value = value.get(key) if isinstance(value, dict) else None
    return value


def verdict(expected: dict[str, Any], found: Any) -> tuple[bool, str]:
    """Whether a figure is as expected, and what was expected in words.

    Raises:
        ValueError: an expectation that says nothing.
    """
    if set(expected) == {"equals"}:
        return found == expected["equals"], f"{expected['equals']}"
    if set(expected) == {"missing"} and expected["missing"] is True:
        return found is None, "no figure"
    if set(expected) == {"from", "to"}:
        low, high = expected["from"], expected["to"]
        inside = isinstance(found, int | float) and low <= found <= high
        return inside, f"{low} to {high}"
    raise ValueError(f"{expected}: neither equals, missing, nor from and to")


def compare(summary: dict[str, Any], expectations: Path) -> bool:
    """Print every expected figure beside the measured one; True when all agree."""
    document = json.loads(expectations.read_text(encoding="utf-8"))
    say(f"\n  expected of it: {document.get('about', '')}")
    good = True
    for name, expected in document["figures"].items():
        found = figure(summary, name)
        agrees, words = verdict(expected, found)
        good = good and agrees
        shown = "no figure" if found is None else f"{found}"
        mark = "as expected" if agrees else "NOT AS EXPECTED"
        say(f"    {name:<32} {words:<28} measured {shown:<24} {mark}")
    return good


def demonstrate(spatiq: Path, capture: Path, out: Path) -> bool:
    """Measure one capture, print its tables, compare; True when all is as it should be."""
    name = capture.name.removesuffix(_ENDING)
    link = capture.with_name(f"{name}.link.toml")
    results = out / f"{name}.spatiq.h5"
    say(f"== spatiq measure {capture.name} {link.name} --csv --annotations\n")
    outputs = ["--out", str(results), "--csv", "--annotations", "--overwrite", "--rows", "5"]
    command = [str(spatiq), "measure", str(capture), str(link), *outputs]
    if subprocess.run(command, cwd=REPOSITORY, check=False).returncode:
        say(f"\n  {name}: NOT MEASURED")
        return False
    expectations = capture.with_name(f"{name}.expected.json")
    if not expectations.is_file():
        return True
    shown = subprocess.run(
        [str(spatiq), "show", str(results), "--json"], check=True, capture_output=True, text=True
    )
    return compare(json.loads(shown.stdout), expectations)


def main() -> int:
    prepare()
    captures = sorted((REPOSITORY / "captures_demo").glob(f"*{_ENDING}"))
    if not captures:
        say("captures_demo/ holds no recording.")
        return 1
    out = REPOSITORY / "out"
    out.mkdir(exist_ok=True)
    say(f"Measuring {len(captures)} recordings of captures_demo/; the first run compiles.\n")
    failed = []
    for capture in captures:
        if not demonstrate(program(REPOSITORY, "spatiq"), capture, out):
            failed.append(capture.name)
        say("")
    say(f"Results, tables and annotated metadata are in {out}.")
    if failed:
        say(f"Not as expected: {', '.join(failed)}.")
        return 1
    say("All figures are as expected.")
    return 0


if __name__ == "__main__":
    sys.exit(main())
