"""Invented stage files for the tests of the physics, and short ways to build from them."""

from __future__ import annotations

from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.stage import Stage, build_stage

PMOS = """
[stage]
name = "Tide gauge logger, input stage"
topology = "pmos-pass"
supply_min_V = 9.0
supply_nominal_V = 12.0
supply_max_V = 15.0
current_nominal_A = 3.0
current_max_A = 5.0
ambient_max_C = 60.0
[parts.Q1]
kind = "p-mosfet"
on_resistance = [
  { gate_V = 4.5, current_A = 5, typ_ohm = 0.030, max_ohm = 0.040 },
  { gate_V = 10, current_A = 5, typ_ohm = 0.019, max_ohm = 0.025 },
  { gate_V = 10, current_A = 5, typ_ohm = 0.028, junction_C = 125 },
]
threshold = { min_V = 1.0, max_V = 2.5, typ_V = 1.7, current_A = 250e-6 }
body_diode = [{ current_A = 5, typ_V = 0.85, max_V = 1.1 }]
drain_source_max_V = 30
gate_source_max_V = 20
drain_current_max_A = 10
junction_max_C = 150
junction_to_case_K_per_W = 4
[heat]
case_to_ambient_K_per_W = 45
case_to_ambient_max_K_per_W = 60
time_constant_s = 40
[sweep]
currents_A = [0.1, 0.2, 0.5, 1, 2, 3, 4, 5]
"""

SCHOTTKY = """
[stage]
name = "Buoy lamp, input stage"
topology = "series-diode"
supply_min_V = 9
supply_nominal_V = 12
supply_max_V = 30
current_nominal_A = 1
current_max_A = 2
ambient_max_C = 60
[parts.D1]
kind = "diode"
technology = "schottky"
forward = [
  { current_A = 0.1, typ_V = 0.26, max_V = 0.31 },
  { current_A = 1, typ_V = 0.36, max_V = 0.42 },
  { current_A = 3, typ_V = 0.45, max_V = 0.52 },
  { current_A = 1, typ_V = 0.28, junction_C = 125 },
]
leakage = [
  { reverse_V = 40, typ_A = 20e-6, max_A = 200e-6 },
  { reverse_V = 40, typ_A = 8e-3, junction_C = 125 },
]
reverse_voltage_max_V = 40
average_current_max_A = 3
junction_max_C = 150
junction_to_case_K_per_W = 10
[heat]
case_to_ambient_K_per_W = 45
case_to_ambient_max_K_per_W = 60
time_constant_s = 40
[sweep]
currents_A = [0.1, 0.2, 0.5, 1, 2]
"""


def stage_file(text: str, *changes: tuple[str, str]) -> StageFile:
    """The text as a file's model, each change made once; a change that finds nothing fails."""
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return parse(StageFile, text, "stage.toml")


def build(text: str, *changes: tuple[str, str]) -> Stage:
    """The stage of such a file."""
    return build_stage(stage_file(text, *changes), "stage.toml")
