"""What a person reads when a file is wrong: file, key, value and what would be right."""

from __future__ import annotations

from pathlib import Path

import pytest

from benchkit.errors import InputError
from benchkit.files import BenchFile, LotFile, StageFile, load
from benchkit.files.parts import Bipolar
from tests.benchkit import nine_stages
from tests.benchkit.example_stages import PMOS, SCHOTTKY, stage_file


def complaint(text: str, *changes: tuple[str, str]) -> str:
    with pytest.raises(InputError) as caught:
        stage_file(text, *changes)
    assert caught.value.exit_code == 2
    return str(caught.value)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        # unknown keys, with the nearest right one
        (("supply_min_V", "suply_min_V"), None),
        (
            ('kind = "p-mosfet"', 'kind = "p-mosfet"\ngate_source_V = 20'),
            "parts.Q1.gate_source_V is not a key here; the nearest right one is "
            "gate_source_max_V",
        ),
        (
            ("gate_V = 4.5,", "gate_V = 4.5, gate_volts = 4,"),
            "parts.Q1.on_resistance[1].gate_volts is not a key here; the nearest right one is "
            "gate_V",
        ),
        (
            ("[heat]", "[bonus]\nx = 1\n[heat]"),
            "bonus is not a key here; the keys here are battery, battery_trial, equipment, "
            "fused_trial, heat, limits, network, parts, reverse, soak, source, stage, "
            "supply_sweep, sweep",
        ),
        # wrong units: a key with another unit is an unknown key
        (
            ("time_constant_s = 40", "time_constant_s = 40\ntime_constant_ms = 40"),
            "heat.time_constant_ms is not a key here; the nearest right one is time_constant_s",
        ),
        # missing
        (("time_constant_s = 40\n", ""), "heat.time_constant_s is missing"),
        ((", current_A = 250e-6", ""), "parts.Q1.threshold.current_A is missing"),
        (
            ('kind = "p-mosfet"\n', ""),
            "parts.Q1.kind is missing: it says what kind of part this is",
        ),
        # wrong type
        (("ambient_max_C = 60.0", 'ambient_max_C = "60"'),
         "stage.ambient_max_C is '60', it must be a number"),
        (("ambient_max_C = 60.0", "ambient_max_C = true"),
         "stage.ambient_max_C is true, it must be a number"),
        (("currents_A = [0.1, 0.2, 0.5, 1, 2, 3, 4, 5]", "currents_A = 5"),
         "sweep.currents_A is 5, it must be a list: [ ... ]"),
        (("name = \"Tide gauge logger, input stage\"", "name = 7"),
         "stage.name is 7, it must be text in quotes"),
        (("threshold = {", "threshold = 1.7 #"),
         "parts.Q1.threshold is 1.7, it must be a table of keys and values"),
        # impossible values
        (("supply_min_V = 9.0", "supply_min_V = -9"),
         "stage.supply_min_V is -9, it must be greater than 0"),
        (("ambient_max_C = 60.0", "ambient_max_C = nan"),
         "stage.ambient_max_C is nan, it must be a finite number"),
        (("junction_max_C = 150", "junction_max_C = 1500"),
         "parts.Q1.junction_max_C is 1500, it must be less than or equal to 250"),
        (('topology = "pmos-pass"', 'topology = "pmos"'),
         "stage.topology is 'pmos', it must be 'clamp', 'fused-clamp', 'series-diode', "
         "'pmos-pass', 'pmos-pass-zener', 'pmos-sensed', 'nmos-pass', 'nmos-pass-zener', "
         "'nmos-sensed' or 'network'"),
        (('kind = "p-mosfet"', 'kind = "pmos"'),
         "parts.Q1.kind is 'pmos', it must be one of 'diode', 'zener', 'tvs', 'p-mosfet', "
         "'n-mosfet', 'npn', 'pnp', 'resistor', 'lead', 'fuse'"),
        # values that do not go together
        (("supply_min_V = 9.0", "supply_min_V = 13"),
         "stage: supply_min_V 13, supply_nominal_V 12 and supply_max_V 15 must rise in that order"),
        (("max_ohm = 0.040", "max_ohm = 0.020"),
         "parts.Q1.on_resistance[1]: max_ohm 0.02 must not be below typ_ohm 0.03"),
        (("typ_V = 1.7", "typ_V = 2.7"),
         "parts.Q1.threshold: min_V 1, typ_V 2.7 and max_V 2.5 must rise in that order"),
        (("[parts.Q1]", "[parts.main-switch]"),
         "parts: 'main-switch' must be a reference such as D1 or Q2"),
        (("3, 4, 5]", "3, 3, 5]"), "sweep.currents_A: 3 follows 3: the currents must rise"),
        (("4, 5]", "4, 6]"),
         "sweep.currents_A ends at 6: it must not go above stage.current_max_A 5"),
        (("[sweep]", "[limits]\ndrop = [{ current_A = 2.5, max_V = 0.1 }]\n[sweep]"),
         "limits.drop has a limit at 2.5 A, which is not one of sweep.currents_A: add it there, so "
         "that it is measured"),
        (("[sweep]", "[limits]\ncase_max_C = 80\n[sweep]"),
         "limits.case_max_C needs a [soak] table, or it is never measured"),
    ],
)  # fmt: skip
def test_one_mistake_is_one_sentence(change: tuple[str, str], message: str | None) -> None:
    text = complaint(PMOS, change)
    if message is None:  # a misspelt key is two mistakes: one too many, one missing
        assert text.splitlines() == [
            "stage.toml: 2 mistakes",
            "stage.toml: stage.supply_min_V is missing",
            "stage.toml: stage.suply_min_V is not a key here; the nearest right one is "
            "supply_min_V",
        ]
    else:
        assert text == f"stage.toml: {message}"


def test_all_mistakes_are_said_at_once() -> None:
    text = complaint(
        PMOS, ("supply_min_V = 9.0", "supply_min_V = -9"), ("time_constant_s = 40\n", ""),
        ("min_V = 1.0,", ""), ("junction_to_case_K_per_W = 4", "junction_to_case = 4"),
    )  # fmt: skip
    assert text.splitlines() == [
        "stage.toml: 4 mistakes",
        "stage.toml: stage.supply_min_V is -9, it must be greater than 0",
        "stage.toml: parts.Q1.threshold.min_V is missing",
        "stage.toml: parts.Q1.junction_to_case is not a key here; the nearest right one is "
        "junction_to_case_K_per_W",
        "stage.toml: heat.time_constant_s is missing",
    ]


@pytest.mark.parametrize("kind", ["npn", "pnp"])
def test_hints_are_those_of_the_part_s_own_kind(kind: str) -> None:
    text = nine_stages.text("pmos-sensed" if kind == "npn" else "nmos-sensed")
    kinds = f'kind = "{kind}"'
    allowed = ", ".join(sorted(Bipolar.model_fields))
    assert complaint(text, (kinds, f"{kinds}\nzzz = 1")) == (
        f"stage.toml: parts.Q2.zzz is not a key here; the keys here are {allowed}"
    )
    assert "on_resistance" not in allowed


@pytest.mark.parametrize(
    ("line", "keys"),
    [
        # both names are also those of a table of another kind of part, with other keys
        ("breakdown = { typ_V = 7.2, current_A = 10e-6, zzz = 1 }", "current_A, typ_V"),
        ("leakage = { collector_base_V = 20, typ_A = 1e-9, zzz = 1 }",
         "collector_base_V, junction_C, max_A, typ_A"),
    ],
)  # fmt: skip
def test_hints_within_a_table_are_those_of_the_part_s_own_kind(line: str, keys: str) -> None:
    where = line.split(" ", maxsplit=1)[0]
    there = "breakdown = { typ_V = 7.2, current_A = 10e-6 }"
    new = line if where == "breakdown" else f"{there}\n{line}"
    assert complaint(nine_stages.text("nmos-sensed"), (there, new)) == (
        f"stage.toml: parts.Q2.{where}.zzz is not a key here; the keys here are {keys}"
    )


def test_a_kind_that_is_unknown_leaves_the_keys_open() -> None:
    """Only the kind is wrong then: which keys are right nobody knows."""
    assert complaint(PMOS, ('kind = "p-mosfet"', 'kind = "mosfet"\nzzz = 1')).count("\n") == 0


def test_surge_width_is_that_of_a_mains_half_sine() -> None:
    surge = 'kind = "diode"\nsurge_width_ms = {0}'.format
    assert "surge_width_ms: 9 must be 8.3 or 10, the half-sine of 60 or of 50 Hz" in complaint(
        SCHOTTKY, ('kind = "diode"', surge(9))
    )
    for width in (8.3, 10):
        stage_file(SCHOTTKY, ('kind = "diode"', surge(width)))


def test_text_that_is_not_toml() -> None:
    assert complaint(PMOS, ("[heat]", "[heat")).startswith("stage.toml: is not valid TOML: ")


def test_file_that_is_not_there(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"none\.toml: there is no such file$"):
        load(StageFile, tmp_path / "none.toml")


def test_file_that_is_not_text(tmp_path: Path) -> None:
    path = tmp_path / "stage.toml"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(InputError, match=r"stage\.toml: line 1 is not UTF-8 text"):
        load(StageFile, path)
    with pytest.raises(InputError, match="is a directory"):
        load(StageFile, tmp_path)


def test_empty_files_say_what_is_missing(tmp_path: Path) -> None:
    path = tmp_path / "empty.toml"
    path.write_text("", encoding="utf-8")
    for model, missing in (
        (StageFile, ["stage", "parts", "heat", "sweep"]),
        (BenchFile, ["bench", "instruments", "points"]),
        (LotFile, ["lot"]),
    ):
        with pytest.raises(InputError) as caught:
            load(model, path)
        said = [line for line in str(caught.value).splitlines() if line.endswith("is missing")]
        assert said == [f"{path}: {name} is missing" for name in missing]
