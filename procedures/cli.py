"""The command line: what each command takes, and where it goes. Heavy imports wait until used."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from procedures.exits import leaving

app = typer.Typer(
    add_completion=False,
    no_args_is_help=True,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
    help="Characterises a reverse-polarity protection stage on the bench and compares it with "
    "its datasheets. Exit codes: 0 every limit met, 1 not passed, 2 bad input, 3 stopped with "
    "outputs confirmed off, 4 OUTPUTS NOT CONFIRMED OFF: make safe by hand.",
)

BenchOption = Annotated[Path, typer.Option("--bench", help="The bench file.", show_default=False)]
SerialOption = Annotated[str, typer.Option("--serial", help="Serial of the board.")]
OutOption = Annotated[Path | None, typer.Option("--out", help="Where results go.")]
JsonOption = Annotated[
    bool, typer.Option("--json", help="One JSON document on standard output, and nothing else.")
]
DryRunOption = Annotated[
    bool, typer.Option("--dry-run", help="Print the plan, the limits and the cautions; do nothing.")
]


@app.command()
def demo(
    out: Annotated[Path, typer.Option("--out", help="A new folder.")] = Path("demo-run"),
    seed: Annotated[int | None, typer.Option("--seed", min=0, help="Another world.")] = None,
) -> None:
    """Run the whole main job on the simulated bench: a lot of boards, and its reports."""
    from procedures.demo import run_demo

    with leaving():
        raise typer.Exit(run_demo(out, seed))


@app.command()
def new(directory: Annotated[Path, typer.Argument(help="Where the files go.")]) -> None:
    """Write commented starter files: a bench, two stages, a lot. They run as they are."""
    from procedures.starters import write_starters

    with leaving():
        raise typer.Exit(write_starters(directory))


@app.command()
def predict(
    stage: Annotated[Path, typer.Argument(help="The stage file.")],
    page: Annotated[
        Path | None, typer.Option("--page", help="Also write it as a page to print: page.html.")
    ] = None,
    json: JsonOption = False,
) -> None:
    """Say what the datasheets promise: drop, loss, heat, gate voltage, ratings. No instrument."""
    from procedures.show_prediction import show_prediction

    with leaving():
        raise typer.Exit(show_prediction(stage, page, as_json=json))


@app.command()
def netlist(
    stage: Annotated[Path, typer.Argument(help="The stage file.")],
    scenario: Annotated[
        str, typer.Option("--scenario", help="Which one, such as reversed-source; see predict.")
    ],
    ambient: Annotated[
        float | None, typer.Option("--ambient", help="In C; the stage's nominal one otherwise.")
    ] = None,
    out: Annotated[Path | None, typer.Option("--out", help="A file: deck.cir.")] = None,
) -> None:
    """Write the stage in one of its scenarios as a SPICE deck, with the same laws."""
    from procedures.show_netlist import show_netlist

    with leaving():
        raise typer.Exit(show_netlist(stage, scenario, ambient, out))


@app.command()
def verify(
    stage: Annotated[Path, typer.Argument(help="The stage file.")],
    bench: BenchOption,
    serial: SerialOption,
    out: OutOption = None,
    dry_run: DryRunOption = False,
    json: JsonOption = False,
    unattended: Annotated[
        bool,
        typer.Option(
            "--unattended",
            help="Nobody is there: the board is in already. Needs an interlock loop and relays.",
        ),
    ] = False,
) -> None:
    """Measure one board, judge it, and write its report."""
    from procedures.commands import verify_board

    with leaving():
        raise typer.Exit(
            verify_board(
                stage, bench, serial, out,
                dry_run=dry_run, as_json=json, unattended=unattended,
            )
        )  # fmt: skip


@app.command()
def batch(
    lot: Annotated[Path, typer.Argument(help="The lot file.")],
    bench: BenchOption,
    out: OutOption = None,
    resume: Annotated[bool, typer.Option("--resume", help="Go on with a lot begun.")] = False,
    dry_run: DryRunOption = False,
    json: JsonOption = False,
) -> None:
    """Measure a lot, board by board, and write its reports."""
    from procedures.commands import batch_lot

    with leaving():
        raise typer.Exit(batch_lot(lot, bench, out, resume=resume, dry_run=dry_run, as_json=json))


@app.command()
def report(
    runs: Annotated[list[Path], typer.Argument(help="Run folders, or a lot's folder.")],
) -> None:
    """Rebuild reports from the record alone."""
    from procedures.rebuild import rebuild

    with leaving():
        raise typer.Exit(rebuild(runs))


@app.command()
def audit(
    runs: Annotated[list[Path], typer.Argument(help="Run folders, or a lot's folder.")],
    json: JsonOption = False,
) -> None:
    """Check a record's hashes and work out every figure and verdict again from its readings."""
    from procedures.rebuild import audit_runs

    with leaving():
        raise typer.Exit(audit_runs(runs, as_json=json))


@app.command()
def simulate(
    bench: Annotated[Path, typer.Argument(help="A bench file with a [simulated] table.")],
    speed: Annotated[float, typer.Option("--speed", help="Bench seconds a second.")] = 1.0,
) -> None:
    """Serve the simulated bench as SCPI instruments on loopback TCP, for any VISA client."""
    from procedures.simulate import serve_bench

    with leaving():
        raise typer.Exit(serve_bench(bench, speed))
