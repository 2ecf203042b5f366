"""Every topology as a stage file, from invented parts of a 12 V charger or logger."""

from __future__ import annotations

from benchkit.files.loading import parse
from benchkit.files.stage import StageFile
from benchkit.stage import Stage, build_stage

PARTS = {
    "mosfet": """
on_resistance = [
  { gate_V = 4.5, current_A = 5, typ_ohm = 0.030, max_ohm = 0.040 },
  { gate_V = 10, current_A = 5, typ_ohm = 0.019, max_ohm = 0.025 },
  { gate_V = 10, current_A = 5, typ_ohm = 0.028, junction_C = 125 },
]
threshold = { min_V = 1.0, max_V = 2.5, typ_V = 1.7, current_A = 250e-6 }
body_diode = [{ current_A = 5, typ_V = 0.85, max_V = 1.1 }]
leakage = [{ reverse_V = 30, typ_A = 20e-9, max_A = 1e-6 }]
drain_source_max_V = 40
gate_source_max_V = 20
drain_current_max_A = 12
junction_max_C = 150
junction_to_case_K_per_W = 4
""",
    "bipolar": """
gain = { min = 110, max = 450, typ = 220, current_A = 2e-3 }
base_emitter = [{ current_A = 2e-3, typ_V = 0.66, max_V = 0.72 }]
saturation = { collector_A = 10e-3, base_A = 0.5e-3, typ_V = 0.09, max_V = 0.25 }
breakdown = { typ_V = 7.2, current_A = 10e-6 }
collector_emitter_max_V = 45
emitter_base_max_V = 6
collector_current_max_A = 0.1
junction_max_C = 150
""",
    "zener": """
kind = "zener"
voltage = { min_V = 9.4, typ_V = 10.0, max_V = 10.6, current_A = 5e-3 }
dynamic_ohm = 12
power_max_W = 0.35
junction_max_C = 150
""",
    "schottky": """
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
  { reverse_V = 40, typ_A = 3e-3, junction_C = 100 },
]
reverse_voltage_max_V = 40
average_current_max_A = 3
surge_current_max_A = 80
junction_max_C = 150
junction_to_case_K_per_W = 6
""",
    "rectifier": """
kind = "diode"
technology = "silicon"
forward = [
  { current_A = 0.1, typ_V = 0.70, max_V = 0.80 },
  { current_A = 1, typ_V = 0.82, max_V = 0.95 },
  { current_A = 6, typ_V = 0.95, max_V = 1.10 },
]
leakage = [{ reverse_V = 100, typ_A = 0.1e-6, max_A = 5e-6 }]
reverse_voltage_max_V = 100
average_current_max_A = 6
surge_current_max_A = 300
junction_max_C = 150
junction_to_case_K_per_W = 3
""",
    "signal": """
kind = "diode"
technology = "silicon"
forward = [
  { current_A = 0.001, typ_V = 0.60 },
  { current_A = 0.01, typ_V = 0.72, max_V = 0.85 },
  { current_A = 0.1, typ_V = 0.90, max_V = 1.1 },
]
leakage = [{ reverse_V = 50, typ_A = 5e-9, max_A = 100e-9 }]
reverse_voltage_max_V = 75
average_current_max_A = 0.15
junction_max_C = 150
""",
    "fuse": """
kind = "fuse"
standard = "ul-248-14"
rated_current_A = 5
rated_voltage_V = 32
breaking_A = 1000
cold_ohm = 0.016
drop_V = 0.11
melting_A2s = 40
""",
}


def resistor(ohms: float, role: str, watts: float = 0.25) -> str:
    return (
        f'kind = "resistor"\nrole = "{role}"\nvalue_ohm = {ohms}\ntolerance_percent = 1\n'
        f"power_max_W = {watts}\n"
    )


def _mosfet(kind: str) -> str:
    return f'kind = "{kind}"{PARTS["mosfet"]}'


def _bipolar(kind: str) -> str:
    return f'kind = "{kind}"{PARTS["bipolar"]}'


def _switch(channel: str, sensor: str) -> dict[str, dict[str, str]]:
    mos = {"Q1": _mosfet(channel)}
    letter = channel[0]
    return {
        f"{letter}mos-pass": {**mos, "R1": resistor(1000, "gate")},
        f"{letter}mos-pass-zener": {
            **mos, "R1": resistor(4700, "gate"), "Z1": PARTS["zener"],
        },
        f"{letter}mos-sensed": {
            **mos, "R1": resistor(100e3, "hold"), "R2": resistor(47e3, "base"),
            "Q2": _bipolar(sensor), "D1": PARTS["signal"],
        },
    }  # fmt: skip


STAGES: dict[str, dict[str, str]] = {
    "clamp": {"D1": PARTS["rectifier"]},
    "fused-clamp": {"D1": PARTS["rectifier"], "F1": PARTS["fuse"]},
    "series-diode": {"D1": PARTS["schottky"]},
    **_switch("p-mosfet", "npn"),
    **_switch("n-mosfet", "pnp"),
}


def text(topology: str, stage: str = "", tables: str = "", **parts: str | None) -> str:
    """A stage file. ``parts`` replace or add parts by reference; None takes one out.

    stage: more lines of [stage]. tables: more tables.
    """
    fitted = {**STAGES[topology], **parts}
    listed = "\n".join(f"[parts.{ref}]\n{body}" for ref, body in fitted.items() if body is not None)
    return f"""
[stage]
name = "Buoy charger, {topology}"
topology = "{topology}"
supply_min_V = 9.0
supply_nominal_V = 12.0
supply_max_V = 15.0
current_nominal_A = 2.0
current_max_A = 3.0
ambient_max_C = 50.0
{stage}
{tables}
{listed}
[heat]
case_to_ambient_K_per_W = 35
case_to_ambient_max_K_per_W = 45
time_constant_s = 40
[sweep]
currents_A = [0.1, 0.5, 1.0, 2.0, 3.0]
"""


def made(topology: str, stage: str = "", tables: str = "", **parts: str | None) -> Stage:
    """The stage of ``text``."""
    file = parse(StageFile, text(topology, stage, tables, **parts), "stage.toml")
    return build_stage(file, "stage.toml")
