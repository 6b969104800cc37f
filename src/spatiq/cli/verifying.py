"""What `spatiq verify` does, once it is loaded."""

from __future__ import annotations

import sys
from dataclasses import dataclass
from pathlib import Path

from spatiq.acceptance.calibration import load_calibration
from spatiq.acceptance.decision import Decision
from spatiq.acceptance.document import Subject, document, write_hdf5, write_json
from spatiq.acceptance.limits import load_limits
from spatiq.acceptance.setup import Setup
from spatiq.acceptance.text import report
from spatiq.acceptance.verification import verify
from spatiq.cli.progress import ProgressBar
from spatiq.errors import InputError
from spatiq.link.loading import load_link
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.opening import open_recording
from spatiq.results.plain import json_text
from spatiq.results.whole_files import check_target


@dataclass(frozen=True)
class VerifyRequest:
    """What `spatiq verify` was asked for."""

    recording: Path
    link: Path
    limits: Path
    setup: str
    calibration: Path | None
    hdf5: Path | None
    json: Path | None
    as_json: bool
    options: ReceiverOptions
    name: str | None
    full_scale: float | None
    overwrite: bool


def run_verify(request: VerifyRequest) -> int:
    """Verify, keep, print. Returns 0 when accepted, else 1.

    Raises:
        InputError: inputs, options or outputs that cannot be used.
    """
    if request.setup not in set(Setup):
        raise InputError("--setup", "", request.setup, ", ".join(Setup))
    recording = open_recording(
        request.recording, full_scale=request.full_scale, recording=request.name
    )
    link, limits = load_link(request.link), load_limits(request.limits)
    calibration = None
    if request.calibration is not None:
        calibration = load_calibration(request.calibration, recording.channels)
    _check_outputs(request, recording.path)
    for warning in recording.warnings:
        print(f"spatiq: note: {warning}", file=sys.stderr)
    setup = Setup(request.setup)
    with ProgressBar() as bar:
        found = verify(
            recording,
            link,
            limits,
            request.options,
            setup=setup,
            calibration=calibration,
            progress=bar,
        )
    subject = Subject(recording.name, link.name, request.limits.name, setup.value)
    made = document(found, limits, subject)
    if request.hdf5 is not None:
        write_hdf5(request.hdf5, made, overwrite=request.overwrite)
    if request.json is not None:
        write_json(request.json, made, overwrite=request.overwrite)
    print(json_text(made) if request.as_json else report(made), end="\n" if request.as_json else "")
    return 0 if found.verdict is Decision.ACCEPTED else 1


def _check_outputs(request: VerifyRequest, recording: Path) -> None:
    """Refuse targets before the work: what is there, and inputs in any case."""
    inputs = [p for p in (request.link, request.limits, request.calibration, recording) if p]
    for target in (request.hdf5, request.json):
        if target is None:
            continue
        check_target(target, overwrite=request.overwrite)
        if target.exists() and any(p.exists() and target.samefile(p) for p in inputs):
            raise InputError(target, "", "an input", "the name of another file")
