"""The bench file: who reads what, and what is wrong with a bench that cannot work."""

from __future__ import annotations

import pytest

from benchkit.errors import InputError
from benchkit.files.bench import BenchFile
from benchkit.files.loading import parse

BENCH = """
[bench]
name = "Boathouse bench"
voltage_max_V = 32.0
current_max_A = 10.0
power_max_W = 150.0
[instruments.supply]
kind = "supply"
resource = "simulated"
dialect = "supply-list"
identity = "Harrowgate,PS-32"
calibration_due = 2027-06-30
[instruments.load]
kind = "load"
resource = "simulated"
dialect = "load-plain"
identity = "Harrowgate,EL-150"
calibration_due = 2027-06-30
[instruments.meter]
kind = "meter"
resource = "simulated"
dialect = "meter-scan"
identity = "Quillmere,SM-6"
calibration_due = 2027-06-30
voltage = [{ range_V = 0.1, reading_percent = 0.005, range_percent = 0.0035 }]
[instruments.thermometer]
kind = "thermometer"
resource = "simulated"
dialect = "thermometer-scan"
identity = "Quillmere,TH-8"
calibration_due = 2027-06-30
temperature = { offset_K = 0.5 }
[points]
drop = { instrument = "meter", route = "101" }
exposed_voltage = { instrument = "meter", route = "102" }
guarded_voltage = { instrument = "meter", route = "103" }
exposed_current = { instrument = "meter", route = "104", shunt_ohm = 0.01 }
case = { instrument = "thermometer", route = "201" }
ambient = { instrument = "thermometer", route = "202" }
[simulated]
"""


def bench(*changes: tuple[str, str]) -> BenchFile:
    text = BENCH
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    return parse(BenchFile, text, "bench.toml")


def test_a_good_bench() -> None:
    found = bench()
    assert found.is_simulated
    assert found.only("load")[0] == "load"
    assert found.bench.settle_s == 0.05
    assert found.points["drop"].aperture_nplc == 1.0
    assert found.simulated is not None
    assert found.simulated.boards == {}
    assert found.bench.bleeder_ohm is None
    told = bench(("power_max_W = 150.0", "power_max_W = 150.0\nbleeder_ohm = 1000"))
    assert told.bench.bleeder_ohm == 1000.0


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (("voltage_max_V = 32.0", "voltage_max_V = 80"),
         "bench.voltage_max_V is 80, it must be less than or equal to 60"),
        (("power_max_W = 150.0", "power_max_W = 150.0\nbleeder_ohm = 47"),
         "bench.bleeder_ohm is 47, it must be greater than or equal to 100"),
        (("power_max_W = 150.0", "power_max_W = 150.0\nbleeder_ohm = 200_000"),
         "bench.bleeder_ohm is 200000, it must be less than or equal to 100000"),
        (("calibration_due = 2027-06-30", 'calibration_due = "2027-06-30"'),
         "instruments.supply.calibration_due is '2027-06-30', it must be a date such as "
         "2027-06-30, without quotes"),
        (("voltage = [", "#"),
         "instruments.meter: a meter needs its accuracy: voltage = [{ range_V = ..., ... }]"),
        (("temperature = {", "#"),
         "instruments.thermometer: a thermometer needs its accuracy: temperature = "
         "{ offset_K = ... }"),
        (('kind = "load"', 'kind = "supply"'), "instruments: supply and load are both of kind "
         "'supply': give one, or say of one of them stands_for = \"battery\""),
        (('kind = "load"', 'kind = "sink"'),
         "instruments.load.kind is 'sink', it must be 'supply', 'meter', 'thermometer', 'load' or "
         "'switch'"),
        (("ambient = {", "#"), "points.ambient is missing"),
        (('drop = { instrument = "meter"', 'drop = { instrument = "dvm"'),
         "points.drop.instrument is 'dvm', it must be one of load, meter, supply, thermometer"),
        (('case = { instrument = "thermometer"', 'case = { instrument = "meter"'),
         "points.case.instrument is 'meter', a meter: it must be a thermometer"),
        ((", shunt_ohm = 0.01", ""),
         "points.exposed_current.shunt_ohm is missing: current is read across a shunt"),
        (('route = "101"', 'route = "101", shunt_ohm = 0.1'),
         "points.drop.shunt_ohm is for exposed_current only"),
        (("[simulated]\n", ""),
         'a resource is "simulated", so a [simulated] table is needed'),
        (('resource = "simulated"', 'resource = "TCPIP::10.0.0.7::INSTR"'),
         'only load, meter, thermometer has the resource "simulated": a bench is simulated as a '
         "whole or not at all"),
        (("[points]\n", '[points]\nrise = { instrument = "meter" }\n'),
         "points.rise cannot stand here: it must be 'drop', 'exposed_voltage', 'guarded_voltage', "
         "'exposed_current', 'case', 'ambient' or 'gate_voltage'"),
    ],
)  # fmt: skip
def test_a_bench_that_cannot_work_is_named(change: tuple[str, str], message: str) -> None:
    with pytest.raises(InputError) as caught:
        bench(change)
    lines = str(caught.value).splitlines()
    assert f"bench.toml: {message}" in lines
    assert len(lines) == 1, lines
