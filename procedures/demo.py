"""`demo`: the whole main job on the simulated bench, and which files to open afterwards."""

from __future__ import annotations

from pathlib import Path

from rich.console import Console

from benchkit.errors import InputError
from procedures.batch import Lot
from procedures.commands import measure_lot, opened
from procedures.inputs import check_writable, read_board, read_lot
from procedures.screen import Screen
from procedures.starters import place_starters
from procedures.tell import tell_board, tell_lot
from procedures.verify import run_board, write_report

DIODE_SERIAL = "TG-0042"


def run_demo(out: Path, seed: int | None) -> int:
    """Measure an invented lot of MOSFET stages and one diode stage; 0 when it could be done."""
    check_writable(out)
    if out.exists() and any(out.iterdir()):
        raise InputError(f"{out}: is there already and not empty; give another with --out")
    files = out / "files"
    place_starters(files, seed)
    screen = Screen()
    screen.say(
        "A workshop builds loggers for tide gauges. Their input must survive a battery connected\n"
        "backwards, and must not cost more voltage than the battery can spare. On a simulated\n"
        "bench (SCPI instruments on this machine, in a process of their own) we measure a lot of\n"
        f"boards and one of an older design. Its files are in {files}."
    )
    lot_file, inputs = read_lot(files / "lot.toml", files / "bench.toml")
    lot = Lot(lot_file.lot.name, lot_file.lot.serials, out / "lot")
    code, document = measure_lot(inputs, lot, screen, resume=False)
    if code > 1:
        return code
    diode = read_board(files / "stage-diode.toml", files / "bench.toml")
    with opened(diode, screen) as bench:
        board = run_board(bench, diode.job, DIODE_SERIAL, out / DIODE_SERIAL, screen)
    if board.error is not None:
        raise board.error
    write_report(board.folder, board.evaluation)
    console = Console(highlight=False, soft_wrap=True)
    tell_lot(lot, document)
    console.print()
    tell_board(board)
    console.print()
    console.print("Open these in a browser:", style="bold", markup=False)
    console.print(f"  {lot.folder / 'lot.html'}", markup=False)
    failed = [str(b["serial"]) for b in _boards(document) if b["verdict"] != "pass"]
    for serial in [*failed, lot.serials[0]]:
        console.print(f"  {lot.board(serial) / 'report.html'}", markup=False)
    console.print(f"  {board.folder / 'report.html'}", markup=False)
    console.print(f"and try: benchkit audit {lot.folder}", markup=False)
    return 0


def _boards(document: dict[str, object]) -> list[dict[str, object]]:
    boards = document["boards"]
    assert isinstance(boards, list)
    return boards
