"""What a person who meets the program for the first time gets wrong, and what it answers."""

from __future__ import annotations

import io
import re
from pathlib import Path

import pytest
from rich.console import Console

from benchkit.errors import InputError
from benchkit.files import BenchFile, LotFile, StageFile, load
from benchkit.files.loading import FileModel, parse
from benchkit.records.result import Measurand, Result
from procedures.inputs import check_writable, read_board
from procedures.operators import ConsoleOperator
from procedures.screen import Screen
from procedures.starters import place_starters, starter
from procedures.tell import figures, print_table


def said(name: str, *changes: tuple[str, str]) -> str:
    """What loading a starter file with changes is answered with."""
    text = starter(name)
    for old, new in changes:
        assert old in text
        text = text.replace(old, new, 1)
    models: dict[str, type[FileModel]] = {"s": StageFile, "b": BenchFile, "l": LotFile}
    with pytest.raises(InputError) as caught:
        parse(models[name[0]], text, name)
    return str(caught.value)


def test_a_directory_and_other_encodings(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a directory; give the file in it"):
        load(StageFile, tmp_path)
    text = starter("stage.toml")
    file = tmp_path / "s.toml"
    file.write_bytes(text.replace("Tide", "Tidé").encode("latin-1"))
    with pytest.raises(InputError, match="line 4 is not UTF-8 text: save the file as UTF-8"):
        load(StageFile, file)
    file.write_bytes(b"\xef\xbb\xbf" + text.encode())
    assert load(StageFile, file).stage.topology == "pmos-pass"


@pytest.mark.parametrize("value", ["12V", "12,0"])
def test_a_line_that_is_not_toml_is_quoted(value: str) -> None:
    text = said("stage.toml", ("supply_nominal_V = 12.0", f"supply_nominal_V = {value}"))
    assert f"'supply_nominal_V = {value}'" in text
    assert "a number stands without a unit, with a point" in text


def test_brackets_without_end_are_no_defect_of_ours() -> None:
    with pytest.raises(InputError, match="too deep"):
        parse(StageFile, "a = " + "[" * 5000 + "]" * 5000, "s.toml")


def test_another_kind_of_file_is_one_sentence() -> None:
    with pytest.raises(InputError) as caught:
        parse(StageFile, starter("bench.toml"), "bench.toml")
    assert len(str(caught.value).splitlines()) == 1
    assert "another kind of file; here one with [stage], [parts], [heat], [sweep]" in str(
        caught.value
    )


def test_few_currents_a_wrong_point_and_a_limit_in_millivolts() -> None:
    few = said("stage.toml", ("[0.1, 0.2, 0.5, 1.0, 2.0, 3.0, 4.0, 5.0]", "[3.0, 5.0]"))
    assert "sweep.currents_A is too short: it holds 2, and at least 4 are needed" in few
    point = said("bench.toml", ("[points.ambient]", "[points.ambiant]"))
    assert "points.ambiant cannot stand here: it must be 'drop'" in point
    address = said("bench.toml", ('resource = "simulated"', 'resource = "192.0.2.10:5025"'))
    assert "instruments.supply.resource: '192.0.2.10:5025' must be a VISA resource such" in address
    limit = said("stage.toml", ("max_V = 0.078", "max_V = 78.0"))
    assert "limits.drop[1].max_V is 78: it must be below stage.supply_min_V 9" in limit


def test_serials_that_differ_in_capitals_only() -> None:
    assert "TG-0101 and tg-0101 differ in capitals only" in said(
        "lot.toml", ('"TG-0102"', '"tg-0101"')
    )


@pytest.mark.parametrize(
    ("old", "new", "answer"),
    [
        ('"supply-list"', '"suply-list"', "instruments.supply.dialect is 'suply-list', it must be"),
        ('"supply-list"', '"load-plain"', "'load' was found where a 'supply' is needed"),
        ('"gate-open"', '"gate-opn"', "simulated.boards.TG-0106: 'gate-opn' is not a fault"),
        ("rds-on-scale=1.392", "rds-on-scale=abc", "simulated.boards.TG-0111"),
        ('stage = "stage.toml"', 'stage = "stag.toml"', "simulated.stage is 'stag.toml', but"),
    ],
)
def test_the_bench_file_is_checked_before_anything_is_opened(
    tmp_path: Path, old: str, new: str, answer: str
) -> None:
    place_starters(tmp_path)
    bench = tmp_path / "bench.toml"
    bench.write_text(bench.read_text("utf-8").replace(old, new, 1), encoding="utf-8")
    with pytest.raises(InputError, match=re.escape(answer)) as caught:
        read_board(tmp_path / "stage.toml", bench)
    assert str(caught.value).startswith(f"{bench}: ")


def test_results_that_cannot_be_written_are_refused_first(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match=r"--out is .*file: give a folder"):
        check_writable(tmp_path / "file" / "lot")
    with pytest.raises(InputError, match="nothing can be written in /proc"):
        check_writable(Path("/proc/benchkit-results"))
    check_writable(tmp_path / "new" / "lot")
    assert sorted(tmp_path.iterdir()) == [tmp_path / "file"]


def test_the_caution_names_a_gate_beyond_its_rating(tmp_path: Path) -> None:
    place_starters(tmp_path)
    stage = tmp_path / "stage.toml"
    text = stage.read_text("utf-8")
    assert "BEYOND" not in read_board(stage, tmp_path / "bench.toml").job.plan.cautions[0]
    text = text.replace("supply_nominal_V = 12.0", "supply_nominal_V = 24.0")
    stage.write_text(text.replace("supply_max_V = 15.0", "supply_max_V = 28.0"), encoding="utf-8")
    caution = read_board(stage, tmp_path / "bench.toml").job.plan.cautions[0]
    assert "BEYOND A DATASHEET RATING" in caution
    assert re.search(r"Q1 gate-source voltage 27\.\d of 20 V", caution)


def test_no_bar_is_drawn_over_a_question(monkeypatch: pytest.MonkeyPatch) -> None:
    screen = Screen()
    shown = io.StringIO()
    screen.console = Console(file=shown, force_terminal=True, width=100)
    running: list[bool] = []

    def answer() -> str:
        assert screen._progress is not None
        running.append(screen._progress.live.is_started)
        return "yes"

    monkeypatch.setattr("builtins.input", answer)
    with screen.progress("soak", 10.0):
        assert ConsoleOperator(screen).acknowledge("hot")
        assert screen._progress is not None
        running.append(screen._progress.live.is_started)
    assert running == [False, True]
    assert shown.getvalue().index("Type yes") > shown.getvalue().index("CAUTION")


def test_a_narrow_screen_keeps_names_and_whole_numbers() -> None:
    figure = Measurand(
        name="drop", unit="V", condition="0.1 A, 12 V supply",
        predicted={"nominal": 0.0018, "low": 0.001546, "high": 0.002117},
        measured=0.001714, U=0.000021, k=2.0, limit={"low": None, "high": 0.078},
        verdict="undecided", en=0.1,
    )  # fmt: skip
    shown = io.StringIO()
    result = Result("A1", "stage", "pmos-pass", "undecided", [], [figure], [], [])
    print_table(Console(file=shown, width=60), figures(result))
    assert "…" not in shown.getvalue()
    assert "drop, 0.1 A" in shown.getvalue()
    assert "undecided" in shown.getvalue()
