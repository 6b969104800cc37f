"""`spatiq batch`: everything that was recorded, measured; what is done is never done again."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

_Inputs = Annotated[
    list[str],
    typer.Argument(help="Recordings, collections, archives, folders (with all below), patterns."),
]
_Out = Annotated[Path, typer.Option(help="Results folder; made if it is not there.")]
_Link = Annotated[
    Path | None, typer.Option(help="Link description of all recordings (*.link.toml).")
]
_Rules = Annotated[
    Path | None, typer.Option(help="Rule file: which link goes with which recording.")
]
_Set = Annotated[
    list[str] | None,
    typer.Option("--set", metavar="NAME=VALUE", help="A receiver option; may be repeated."),
]
_Workers = Annotated[
    int | None, typer.Option(min=1, help="Worker processes.", show_default="all cores")
]
_Scheduler = Annotated[
    str | None,
    typer.Option(metavar="ADDRESS|FILE", help="Work on the Dask cluster of this scheduler."),
]
_Split = Annotated[
    str, typer.Option(metavar="SIZE", help="Larger recordings are shared out over workers.")
]
_Settle = Annotated[
    float, typer.Option(min=0, help="Changed within so many seconds: still being written.")
]
_Watch = Annotated[
    float | None,
    typer.Option(metavar="SECONDS", min=0.1, help="Look again after so long, until interrupted."),
]
_Retry = Annotated[
    bool, typer.Option("--retry-failed", help="Try again what failed and has not changed.")
]
_Verify = Annotated[
    bool, typer.Option("--verify", help="Compare the data with core:sha512 where it is stated.")
]
_Bound = Annotated[
    float, typer.Option(min=0, max=1, help="A frame with a BER above it counts as out.")
]
_Json = Annotated[bool, typer.Option("--json", help="Print the night's figures as JSON.")]


def batch_command(
    inputs: _Inputs,
    out: _Out,
    link: _Link = None,
    rules: _Rules = None,
    set_: _Set = None,
    workers: _Workers = None,
    scheduler: _Scheduler = None,
    split_above: _Split = "1GB",
    settle: _Settle = 30.0,
    watch: _Watch = None,
    retry_failed: _Retry = False,
    verify: _Verify = False,
    outage_ber: _Bound = 1e-2,
    as_json: _Json = False,
) -> int:
    """Measure all recordings, keep results and a catalogue, list what went wrong.

    Run it again, after whatever happened: only what is missing or has changed is done. Ends with 0
    when all is measured, with 3 when some recordings failed or were put off. The rule file, results
    and clusters are described by `spatiq catalogue manual`.

    Example: spatiq batch /data/night --rules night.rules.toml --out /data/night-results
    """
    from spatiq.cli.batching import BatchRequest, run_batch

    return run_batch(
        BatchRequest(
            inputs=inputs,
            out=out,
            link=link,
            rules=rules,
            settings=set_ or [],
            workers=workers,
            scheduler=scheduler,
            split_above=split_above,
            settle_s=settle,
            watch_s=watch,
            retry_failed=retry_failed,
            verify=verify,
            outage_ber=outage_ber,
            as_json=as_json,
        )
    )
