"""`spatiq waveform`: reference waveforms to be played on the transmit antennas."""

from __future__ import annotations

from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from spatiq.cli.sample_progress import with_progress
from spatiq.cli.simulate import print_summary
from spatiq.cli.simulate_choices import parse_spacing

if TYPE_CHECKING:
    from spatiq.transmit.playback import Playback


def waveform_command(
    link: Annotated[Path, typer.Argument(help="Link description (TOML).")],
    out: Annotated[Path, typer.Option(help="Folder and base name of the recordings.")],
    samples_per_symbol: Annotated[
        float, typer.Option(help="Sample rate over symbol rate, any real number >= 1.")
    ],
    frames: Annotated[int, typer.Option(help="Number of frames.")] = 100,
    first_frame: Annotated[int, typer.Option(help="Number of the first frame.")] = 0,
    spacing: Annotated[
        str, typer.Option(help="link, back-to-back, or silence in symbol periods: 12.5 or 10:40.")
    ] = "link",
    headroom: Annotated[float, typer.Option(help="Full scale over the peak, dB.")] = 3,
    datatype: Annotated[str, typer.Option(help="SigMF sample format.")] = "ci16_le",
    seed: Annotated[int, typer.Option(help="Seed of data bits and random silences.")] = 0,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace files.")] = False,
    as_json: Annotated[bool, typer.Option("--json", help="Summary as JSON.")] = False,
) -> None:
    """Make the baseband of each transmit antenna: one recording per antenna, and a collection.

    All antennas share one gain; the largest sample stays below full scale by the headroom.

    Example: spatiq waveform lab.link.toml --frames 1000 --samples-per-symbol 4 --out play/lab
    """
    from spatiq.link.loading import load_link
    from spatiq.transmit.output import check_target, set_files
    from spatiq.transmit.playback import CAUTION, playback

    typer.echo(CAUTION, err=True)
    checked = load_link(link)
    check_target(out, set_files(out.name, _names(checked.antennas)), overwrite)
    made = playback(
        checked,
        frames=frames,
        samples_per_symbol=samples_per_symbol,
        first_frame=first_frame,
        spacing=parse_spacing(spacing),
        datatype=datatype,
        headroom_db=headroom,
        seed=seed,
        watch=partial(with_progress, label="finding the peak"),
    )
    print_summary(_summary(made, _write(made, out, overwrite)), as_json)


def _names(antennas: int) -> tuple[str, ...]:
    """Suffixes of the recordings, one per antenna."""
    return tuple(f"-tx{a}" for a in range(antennas))


def _write(made: Playback, out: Path, overwrite: bool) -> tuple[str, ...]:
    """Write recordings and collection; the names of the files."""
    from spatiq.transmit.output import RecordingSet, staged, write_set

    recordings = RecordingSet(
        base=out,
        names=_names(made.link.antennas),
        sample_rate=made.sample_rate,
        datatype=made.datatype,
        carrier_hz=made.link.carrier_hz,
        description=(
            f"baseband of link {made.link.name} to be played, an antenna a recording; "
            f"unit symbol amplitude is {made.gain:.6g} of full scale"
        ),
        overwrite=overwrite,
    )
    files = recordings.files()
    with staged(out, files, overwrite) as folder:
        blocks = with_progress(made.blocks(), made.n_samples, "writing waveforms")
        write_set(recordings, folder, blocks)
    return tuple(str(out.parent / name) for name in files)


def _summary(made: Playback, files: tuple[str, ...]) -> dict[str, Any]:
    """What was made, for people and programs; levels in dB relative to full scale 1.0."""
    import numpy as np

    return {
        "files": list(files),
        "frames": len(made.starts),
        "samples_per_antenna": made.n_samples,
        "sample_rate_hz": made.sample_rate,
        "duration_s": made.n_samples / made.sample_rate,
        "datatype": made.datatype,
        "peak_dbfs": float(20 * np.log10(made.peak)),
        "unit_symbol_dbfs": float(20 * np.log10(made.gain)),
        "rms_dbfs_per_antenna": [
            float(20 * np.log10(rms)) if rms > 0 else None for rms in made.rms
        ],
    }
