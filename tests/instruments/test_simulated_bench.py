"""The simulated instruments in front of the real plant: both sources, relays, fuse, by SCPI."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from instruments.simulated.core import Core
from instruments.simulated.plant import Plant
from instruments.simulated.scpi import Device
from instruments.simulated.server import build_devices
from instruments.simulated.timebase import VirtualTime
from tests.benchkit.nine_stages import text
from tests.instruments.simulated_fake import WITH_BATTERY, WITH_BLEEDER, WITH_SWITCH, bench_file

Ask = Callable[[str, str], str]


@pytest.fixture
def bench(tmp_path: Path) -> Ask:
    file = bench_file(WITH_BATTERY, WITH_SWITCH, WITH_BLEEDER)
    core = Core(Plant(file, tmp_path / "bench.toml", VirtualTime()), 7, "S-1")
    devices: dict[str, Device] = build_devices(file, core)

    def ask(name: str, message: str) -> str:
        """The answer, or "" where none is due; without an error in either case."""
        answer = devices[name].execute(message)
        error = devices[name].errors.pop()
        assert error.startswith("0,"), f"{message}: {error}"
        return answer or ""

    for topology in ("pmos-sensed", "fused-clamp", "pmos-pass"):
        (tmp_path / f"{topology}.toml").write_text(text(topology), "utf-8")

    def insert_first(name: str, message: str) -> str:
        return ask(name, message.replace("DIR", str(tmp_path)))

    return insert_first


def volts(bench: Ask, channel: int) -> float:
    return float(bench("meter", f":CONF:VOLT 100,(@{channel});:READ? (@{channel})"))


def test_a_charger_is_switched_on_by_the_stand_in(bench: Ask) -> None:
    bench("control", ':SIM:INS "S-1","DIR/pmos-sensed.toml"')
    assert bench("control", ":SIM:WIRE?") == '"battery+load","supply",0,0'
    bench("supply", ":SOUR:VOLT 12;:SOUR:CURR 3;:OUTP ON")
    bench("control", ":SIM:TIME:ADV 1")
    assert abs(volts(bench, 102)) < 0.6
    bench("battery", ":SOUR:VOLT 6;:SOUR:CURR 0.5;:OUTP ON")
    bench("control", ":SIM:TIME:ADV 0.5")
    bench("battery", ":OUTP OFF")
    bench("load", ":SOUR:CURR 1;:INP ON")
    bench("control", ":SIM:TIME:ADV 1")
    assert volts(bench, 102) == pytest.approx(12, abs=0.2)
    assert float(bench("battery", ":MEAS:VOLT?")) == pytest.approx(12, abs=0.2)
    current = float(bench("control", ':SIM:TRUT? "exposed_current"'))
    assert current == pytest.approx(-1.12, abs=0.02)
    assert volts(bench, 104) == pytest.approx(0.01 * current, abs=1e-3)


def test_relays_turn_the_supply_and_the_loop_can_open(bench: Ask) -> None:
    bench("control", ':SIM:INS "S-1","DIR/pmos-pass.toml"')
    bench("switch", ":ROUT:OPEN (@301)")
    assert bench("control", ":SIM:WIRE?") == '"","load",0,0'
    bench("switch", ":ROUT:CLOS (@302,303)")
    assert bench("control", ":SIM:WIRE?") == '"supply","load",1,1000'
    bench("supply", ":SOUR:VOLT 12;:SOUR:CURR 0.5;:OUTP ON")
    bench("control", ":SIM:TIME:ADV 0.5")
    assert volts(bench, 102) == pytest.approx(-12, abs=0.05)
    assert bench("switch", ":SENS:DIG:DATA? (@loop)") == "1"
    bench("control", ':SIM:FAUL "loop-open",0')
    assert bench("switch", ":SENS:DIG:DATA? (@loop)") == "0"
    bench("supply", ":OUTP OFF")
    bench("control", ":SIM:TIME:ADV 1")
    assert float(bench("control", ':SIM:TRUT? "hot_rewirings"')) == 0
    bench("switch", ":ROUT:CLOS (@301)")
    assert float(bench("control", ':SIM:TRUT? "relay_shorts"')) == 1


def test_a_fuse_blows_and_says_when(bench: Ask) -> None:
    """The supply's own limit is 6 A here, and that is above the opening current of 5.81 A."""
    bench("control", ':SIM:INS "S-1","DIR/fused-clamp.toml"')
    bench("control", ':SIM:WIRE "supply","",1')
    bench("supply", ":SOUR:VOLT 12;:SOUR:CURR 6;:OUTP ON")
    bench("control", ":SIM:TIME:ADV 0.5")
    assert bench("control", ':SIM:TRUT? "fuse_cleared_s"') == "9.91E37"
    assert -1.2 < volts(bench, 103) < -0.6
    bench("control", ":SIM:TIME:ADV 30")
    assert float(bench("control", ':SIM:TRUT? "fuse_open"')) == 1
    assert 1 < float(bench("control", ':SIM:TRUT? "fuse_cleared_s"')) < 10
    assert volts(bench, 102) == pytest.approx(-12, abs=0.05)
    assert abs(volts(bench, 103)) < 0.1
