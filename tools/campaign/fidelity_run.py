"""Runs sections of the fidelity campaign over worker processes and prints their rows in order."""

from __future__ import annotations

import multiprocessing
import os
import sys
import time
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor

from campaign import (
    estimator_rows,
    false_alarm_rows,
    family_rows,
    fidelity_table,
    floor_rows,
    impairment_rows,
    miss_rows,
)
from campaign.sections import Row, Section

SECTIONS: dict[str, Section] = {
    module.SECTION.name: module.SECTION
    for module in (
        miss_rows,
        false_alarm_rows,
        estimator_rows,
        floor_rows,
        impairment_rows,
        fidelity_table,
        family_rows,
    )
}


def _measure(section: str, key: str, quick: bool) -> Row:
    return SECTIONS[section].measure(key, quick)


def _note(text: str) -> None:
    print(text, end="", file=sys.stderr, flush=True)


def run(names: Sequence[str], quick: bool, only: str = "") -> int:
    """Print the sections' tables; 0 when every bar is met, else 1.

    Args:
        names: sections, in the order of `SECTIONS`; none: all.
        quick: a few rows of each.
        only: rows whose name contains this.
    """
    began = time.monotonic()
    chosen = [s for name, s in SECTIONS.items() if not names or name in names]
    rows = {s.name: [key for key in s.keys(quick) if only in key] for s in chosen}
    # A fresh interpreter for each worker: what threads a library holds is not copied half-way.
    context = multiprocessing.get_context("spawn")
    missed: list[str] = []
    worst, bare = 0.0, 0
    with ProcessPoolExecutor(min(2, os.cpu_count() or 1), mp_context=context) as pool:
        waiting = {
            (name, key): pool.submit(_measure, name, key, quick)
            for name, keys in rows.items()
            for key in keys
        }
        done = 0
        for section in chosen:
            if not rows[section.name]:
                continue
            print(f"== {section.name}\n{section.heading}", flush=True)
            for key in rows[section.name]:
                _note(f"\r{done} of {len(waiting)} rows; waiting for {section.name}: {key}\033[K")
                row = waiting[section.name, key].result()
                done += 1
                _note("\r\033[K")
                print(row.line(), flush=True)
                missed += [f"{section.name}: {key}"] if row.faults else []
                worst = max(worst, row.ber_ratio or 0.0)
                bare += row.compares and row.ber_ratio is None
            print()
    print(f"{time.monotonic() - began:.0f} s; rows with a bar missed: {len(missed)}")
    for name in missed:
        print(f"    {name}")
    if bare:
        print(f"rows in which nothing could be compared with the genie: {bare}")
    print(f"worst BER over genie's: {worst:.4f}" if worst else "worst BER over genie's: none")
    return 1 if missed else 0
