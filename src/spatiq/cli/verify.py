"""`spatiq verify`: a transmitter's recording held against its link description and limits."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from spatiq.receiver.options import ReceiverOptions

_DEFAULTS = ReceiverOptions()


def verify_command(
    recording: Annotated[
        Path, typer.Argument(help="SigMF recording, collection or archive; any of its files.")
    ],
    link: Annotated[Path, typer.Argument(help="Link description (*.link.toml).")],
    limits: Annotated[Path, typer.Argument(help="Limits (*.limits.toml).")],
    setup: Annotated[
        str,
        typer.Option(
            metavar="over-air|combined|ports",
            help="How the transmitter is connected; ports: receive channel i to antenna port i.",
        ),
    ] = "over-air",
    calibration: Annotated[
        Path | None, typer.Option(help="Complex gains of the receive channels (TOML).")
    ] = None,
    out: Annotated[Path | None, typer.Option(help="Also write all figures as HDF5.")] = None,
    json_out: Annotated[
        Path | None, typer.Option("--json-out", help="Also write all figures as JSON.")
    ] = None,
    as_json: Annotated[
        bool, typer.Option("--json", help="Print JSON instead of the report.")
    ] = False,
    cfo_range: Annotated[
        float, typer.Option(help="Carrier offsets searched, +- this share of the symbol rate.")
    ] = _DEFAULTS.cfo_range,
    name: Annotated[
        str | None,
        typer.Option("--recording", metavar="NAME", help="Which one, out of an archive."),
    ] = None,
    full_scale: Annotated[
        float | None,
        typer.Option(help="Sample value that is full scale.", show_default="from the sample type"),
    ] = None,
    overwrite: Annotated[
        bool, typer.Option("--overwrite", help="Replace results already there.")
    ] = False,
) -> int:
    """Verify a transmitter: its figures with their uncertainty, held against limits.

    Exit code 0 accepted; 1 not accepted, or undecided; 2 bad input.
    Figures are engineering measurements, not a certificate of conformity.

    Example: spatiq verify bench.sigmf-meta prototype.link.toml prototype.limits.toml
    """
    from spatiq.cli.verifying import VerifyRequest, run_verify

    return run_verify(
        VerifyRequest(
            recording=recording,
            link=link,
            limits=limits,
            setup=setup,
            calibration=calibration,
            hdf5=out,
            json=json_out,
            as_json=as_json,
            options=ReceiverOptions(cfo_range=cfo_range, compare_two_step=False),
            name=name,
            full_scale=full_scale,
            overwrite=overwrite,
        )
    )
