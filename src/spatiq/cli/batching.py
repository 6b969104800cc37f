"""What `spatiq batch` does, once it is loaded."""

from __future__ import annotations

import os
import re
import secrets
import socket
import sys
import time
import tomllib
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import spatiq
from spatiq.batch.catalogue import Catalogue, open_catalogue
from spatiq.batch.claims import Claims
from spatiq.batch.executors import ClusterWorkers, LocalWorkers, Workers
from spatiq.batch.inputs import find_items
from spatiq.batch.night import night_figures, refresh_standouts
from spatiq.batch.rules import Rules, load_rules, one_link, with_options
from spatiq.batch.run import (
    WORK_FOLDER,
    Round,
    Tally,
    clear_leftovers,
    now,
    prepare_folder,
)
from spatiq.batch.survey import Terms
from spatiq.batch.work import RESULTS_FOLDER
from spatiq.cli.batch_progress import BatchProgress
from spatiq.cli.compiling import is_compiled
from spatiq.cli.night_text import print_night
from spatiq.errors import InputError
from spatiq.link.loading import load_link
from spatiq.receiver.options import ReceiverOptions
from spatiq.results.plain import json_text

IN_PART = 3
_UNITS = {"": 1, "kB": 10**3, "MB": 10**6, "GB": 10**9, "TB": 10**12}


@dataclass(frozen=True)
class BatchRequest:
    """What `spatiq batch` was asked for."""

    inputs: list[str]
    out: Path
    link: Path | None = None
    rules: Path | None = None
    settings: list[str] | tuple[str, ...] = ()
    workers: int | None = None
    scheduler: str | None = None
    split_above: str = "1GB"
    settle_s: float = 30.0
    watch_s: float | None = None
    retry_failed: bool = False
    verify: bool = False
    outage_ber: float = 1e-2
    as_json: bool = False


def run_batch(request: BatchRequest) -> int:
    """Measure what is missing, print the night, return the exit code.

    Raises:
        InputError: inputs, rules, links or results folder that cannot be used.
    """
    rules = _rules(request)
    split_above = parse_size(request.split_above, "--split-above")
    folder = request.out.resolve()
    prepare_folder(folder)
    terms = Terms(
        folder,
        rules,
        request.outage_ber,
        request.settle_s,
        request.retry_failed,
        request.verify,
    )
    find_items(request.inputs)  # inputs that mean nothing are refused before workers start
    with (
        open_catalogue(folder, create=True) as catalogue,
        Claims(folder) as claims,
        _workers(request) as workers,
    ):
        clear_leftovers(folder, claims)
        _say(f"{workers.place}, less than 0.5 GB of memory each (spatiq catalogue manual)")
        tally = _rounds(request, terms, catalogue, claims, workers, split_above)
        clear_leftovers(folder, claims, finished=not tally.growing and not tally.elsewhere)
        figures = night_figures(catalogue)
    if request.as_json:
        sys.stdout.write(json_text(figures) + "\n")
    else:
        print_night(figures)
    bad = tally.failed + tally.failed_before + tally.growing + tally.elsewhere
    return IN_PART if bad else 0


def _rounds(
    request: BatchRequest,
    terms: Terms,
    catalogue: Catalogue,
    claims: Claims,
    workers: Workers,
    split_above: int,
) -> Tally:
    """Round after round: one, another for what was put off and has settled, or for ever."""
    began = time.monotonic()
    run = _run_row(workers)
    catalogue.put(runs=[run])
    again = False
    while True:
        items = find_items(
            request.inputs, (terms.folder / RESULTS_FOLDER, terms.folder / WORK_FOLDER)
        )
        with BatchProgress() as progress:
            # Only the first round tries failed ones again.
            here = terms if not again else _without_retry(terms)
            round_ = Round(
                here, catalogue, claims, workers, split_above, progress.show, is_compiled()
            )
            try:
                tally = round_.run(items)
            finally:
                run["measured"] += round_.tally.measured
                run["failed"] += round_.tally.failed
                run["put_off"] = round_.tally.growing + round_.tally.elsewhere
        refresh_standouts(catalogue)
        run["ended_at"] = now()
        catalogue.put(runs=[run])
        _say(_round_text(tally))
        if request.watch_s is not None:
            time.sleep(request.watch_s)
        elif again or not tally.growing or time.monotonic() - began < terms.settle_s:
            return tally
        again = True


def _without_retry(terms: Terms) -> Terms:
    return Terms(terms.folder, terms.rules, terms.bound, terms.settle_s, False, terms.verify)


def _rules(request: BatchRequest) -> Rules:
    """Rules, with every link read once to see that it can be.

    Raises:
        InputError: both or neither of --link and --rules, or any of the files at fault.
    """
    options = with_options(ReceiverOptions(), parse_settings(request.settings), "--set")
    if (request.link is None) == (request.rules is None):
        found = "neither of them" if request.link is None else "both of them"
        raise InputError("--link, --rules", "", found, "one of them")
    if request.rules is not None:
        rules = load_rules(request.rules, options)
    else:
        assert request.link is not None
        rules = one_link(request.link, options)
    for rule in rules.rules:
        if rule.link is not None:
            load_link(rule.link)
    return rules


def parse_settings(settings: list[str] | tuple[str, ...]) -> dict[str, Any]:
    """NAME=VALUE as names and values; a value is as in TOML, or else a plain text.

    Raises:
        InputError: no "=".
    """
    chosen: dict[str, Any] = {}
    for setting in settings:
        name, equals, text = setting.partition("=")
        if not equals:
            raise InputError("--set", "", setting, "NAME=VALUE")
        try:
            chosen[name.strip()] = tomllib.loads(f"v = {text}")["v"]
        except tomllib.TOMLDecodeError:
            chosen[name.strip()] = text.strip()
    return chosen


def parse_size(text: str, option: str) -> int:
    """A size in bytes, as in 500MB.

    Raises:
        InputError: no such size.
    """
    match = re.fullmatch(r"\s*(\d+(?:\.\d+)?)\s*([kMGT]?B?)\s*", text)
    unit = "" if match is None else match[2].removesuffix("B")
    factor = _UNITS.get(f"{unit}B" if unit else "")
    size = 0 if match is None or factor is None else int(float(match[1]) * factor)
    if size < 1:
        raise InputError(option, "", text, "a size such as 500MB or 2GB")
    return size


def _workers(request: BatchRequest) -> Workers:
    if request.scheduler is not None:
        if request.workers is not None:
            raise InputError("--workers", "", "with --scheduler", "one of them")
        return ClusterWorkers(request.scheduler)
    return LocalWorkers(request.workers or _cores())


def _cores() -> int:
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def _run_row(workers: Workers) -> dict[str, Any]:
    return {
        "run": secrets.token_hex(8),
        "began_at": now(),
        "ended_at": None,
        "program": f"spatiq {spatiq.__version__}",
        "host": f"{socket.gethostname()}, process {os.getpid()}",
        "workers": workers.place,
        "measured": 0,
        "failed": 0,
        "put_off": 0,
    }


def _round_text(tally: Tally) -> str:
    parts = [f"{tally.measured} measured"]
    for number, words in (
        (tally.known, "measured before"),
        (tally.failed, "failed"),
        (tally.failed_before, "failed before (--retry-failed tries them again)"),
        (tally.growing, "still being written: put off"),
        (tally.elsewhere, "in work by another run"),
        (tally.left_out, "left out by rule"),
        (tally.workers_lost, "workers lost and replaced"),
    ):
        if number:
            parts.append(f"{number} {words}")
    if tally.peak_bytes:
        parts.append(f"largest worker {tally.peak_bytes / 1e6:.0f} MB")
    return "; ".join(parts)


def _say(text: str) -> None:
    print(f"spatiq: {text}", file=sys.stderr, flush=True)
