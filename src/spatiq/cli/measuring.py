"""What `spatiq measure` does, once it is loaded."""

from __future__ import annotations

import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

from spatiq.cli.compiling import compiling_ahead
from spatiq.cli.measure import MeasureRequest
from spatiq.cli.printing import print_results
from spatiq.cli.progress import ProgressBar
from spatiq.errors import InputError
from spatiq.link.loading import Link, load_link
from spatiq.link.schema_payload import FileField
from spatiq.metrics.measuring import measure
from spatiq.metrics.summary import Summary
from spatiq.recording.opening import open_recording
from spatiq.recording.recording import Recording
from spatiq.results.annotations import annotation_targets, write_annotations
from spatiq.results.hdf5 import ResultsWriter
from spatiq.results.reader import Results, open_results
from spatiq.results.tables import write_frames_csv, write_frames_json, write_summary_csv
from spatiq.results.whole_files import check_target

_ENDINGS = (".spatiq.h5", ".h5", ".hdf5")


@dataclass(frozen=True)
class Outputs:
    """Files to be written; all but the results only when asked for."""

    results: Path
    frames_csv: Path | None
    summary_csv: Path | None
    frames_json: Path | None
    annotations: Path | None  # name without ending: one file for each data file

    def files(self, recording: Recording) -> Iterator[Path]:
        """All of them by name."""
        tables = (self.results, self.frames_csv, self.summary_csv, self.frames_json)
        yield from (path for path in tables if path is not None)
        if self.annotations is not None:
            yield from annotation_targets(recording, self.annotations)


def plan_outputs(request: MeasureRequest, recording: Recording) -> Outputs:
    """Name the outputs: beside the results file, after its name."""
    results = request.out or Path(f"{Path(recording.name).name}.spatiq.h5")
    ending = next((e for e in _ENDINGS if results.name.endswith(e) and results.name != e), "")
    stem = results.name.removesuffix(ending)

    def named(wanted: bool, end: str) -> Path | None:
        return results.with_name(f"{stem}.{end}") if wanted else None

    return Outputs(
        results,
        named(request.csv, "frames.csv"),
        named(request.csv, "summary.csv"),
        named(request.frames_json, "frames.json"),
        named(request.annotations, "annotated"),
    )


def run_measure(request: MeasureRequest) -> int:
    """Measure, keep, print. Returns the exit code.

    Raises:
        InputError: recording, link, options or outputs that cannot be used.
    """
    recording = open_recording(
        request.recording, full_scale=request.full_scale, recording=request.name
    )
    link = load_link(request.link)
    outputs = plan_outputs(request, recording)
    for path in outputs.files(recording):
        check_target(path, overwrite=request.overwrite)
        _refuse_inputs(path, recording, request.link, link)
    for warning in recording.warnings:
        print(f"spatiq: note: {warning}", file=sys.stderr)
    _measure(recording, link, request, outputs.results)
    with open_results(outputs.results) as results:
        written = [outputs.results, *_write_tables(results, recording, outputs, request.overwrite)]
        print_results(results, rows=request.rows, as_json=request.as_json)
    if not request.as_json:
        print("\n" + "\n".join(f"  written: {path}" for path in written))
    return 0


def _refuse_inputs(path: Path, recording: Recording, link_file: Path, link: Link) -> None:
    """--overwrite is for results: an input is never replaced."""
    inputs = {recording.path, link_file}
    fields = link.spec.payload.field if link.spec.payload is not None else []
    inputs |= {link_file.with_name(f.file) for f in fields if isinstance(f, FileField)}
    for dataset in recording.datasets:
        inputs |= {dataset.metadata_file.path, dataset.data.path}
    if path.exists() and any(given.exists() and path.samefile(given) for given in inputs):
        raise InputError("--out", "", f"{path}, an input", "the name of another file")


def _measure(recording: Recording, link: Link, request: MeasureRequest, path: Path) -> None:
    summary = Summary(link, request.options.confidence)
    with (
        ProgressBar() as bar,
        compiling_ahead(request.link),
        ResultsWriter(
            path, link, recording, request.options, overwrite=request.overwrite
        ) as writer,
    ):
        for frames in measure(recording, link, request.options, progress=bar):
            writer.add(frames)
            summary.add(frames)
        bar.stage("taking the recording's digest")
        writer.close(summary.as_dict())


def _write_tables(
    results: Results, recording: Recording, outputs: Outputs, overwrite: bool
) -> Iterator[Path]:
    for path, write in (
        (outputs.frames_csv, write_frames_csv),
        (outputs.summary_csv, write_summary_csv),
        (outputs.frames_json, write_frames_json),
    ):
        if path is not None:
            write(results, path, overwrite=overwrite)
            yield path
    if outputs.annotations is not None:
        yield from write_annotations(results, recording, outputs.annotations, overwrite=overwrite)
