"""The simulated supply: personalities, protections, relay faults; and the load."""

from __future__ import annotations

import pytest

from tests.instruments.simulated_fake import Bench, bench_file

SUFFIX = {"supply-plain": "", "supply-list": " (@1)", "supply-select": ""}


def bench_with(dialect: str) -> Bench:
    return Bench(bench_file(('"supply-plain"', f'"{dialect}"')))


def switch(bench: Bench, dialect: str, word: str) -> None:
    tail = ",(@1)" if dialect == "supply-list" else ""
    bench.tell("supply", f":OUTP {word}{tail}")


@pytest.fixture
def plain() -> Bench:
    return Bench()


@pytest.mark.parametrize("dialect", SUFFIX)
def test_settings_and_read_back(dialect: str) -> None:
    bench = bench_with(dialect)
    tail = ",(@1)" if dialect == "supply-list" else ""
    bench.tell("supply", f":SOUR:VOLT 12{tail};:SOUR:CURR 500 MA{tail};:SOUR:VOLT:PROT 14{tail}")
    queries = (":SOUR:VOLT?", ":SOUR:CURR?", ":SOUR:VOLT:PROT?", ":SOUR:VOLT? MAX")
    asked = ";".join(q + ("," if " " in q and tail else "") + SUFFIX[dialect] for q in queries)
    assert bench.ask("supply", asked) == "12.0000;0.5000;14.0000;36.0000"
    switch(bench, dialect, "ON")
    volts, amps, on = bench.world.supply
    assert volts == pytest.approx(12, abs=12 * 0.0005 + 0.003)
    assert volts != 12
    assert amps == pytest.approx(0.5, abs=0.5 * 0.0005 + 0.003)
    assert on
    read = float(bench.ask("supply", ":MEAS:VOLT?" + SUFFIX[dialect]))
    assert read == pytest.approx(volts, abs=volts * 0.0005 + 0.003 + 0.001)
    switch(bench, dialect, "0")
    assert bench.ask("supply", ":OUTP?" + SUFFIX[dialect]) == "0"
    assert bench.world.supply[2] is False


def test_other_channels_lead_nowhere() -> None:
    bench = bench_with("supply-list")
    bench.tell("supply", ":SOUR:VOLT 9,(@2);:OUTP ON,(@2)")
    assert bench.world.supply[2] is False
    assert bench.ask("supply", ":SOUR:VOLT? (@1,2);:OUTP? (@1:2)") == "0.0000,9.0000;0,1"
    assert bench.ask("supply", ":OUTP ON,(@4);:SYST:ERR?").startswith("-222")


def test_select_stays_until_another_is_selected() -> None:
    bench = bench_with("supply-select")
    bench.tell("supply", ":INST:NSEL 2;:SOUR:VOLT 9")
    assert bench.ask("supply", ":INST:NSEL?;:SOUR:VOLT?;:INST:NSEL 1;:SOUR:VOLT?") == (
        "2;9.0000;0.0000"
    )
    assert bench.world.supply[0] < 0.01


@pytest.mark.parametrize(
    ("dialect", "foreign"),
    [
        ("supply-plain", ":SOUR:VOLT 5,(@1)"),
        ("supply-plain", ":INST:NSEL 1"),
        ("supply-plain", ":OUTP:PROT:CLE"),
        ("supply-list", ":SOUR:VOLT 5"),
        ("supply-list", ":SOUR:CURR:PROT 5,(@1)"),
        ("supply-select", ":SOUR:VOLT:PROT:CLE"),
        ("supply-select", ":SOUR:VOLT 5,(@1)"),
    ],
)
def test_a_personality_does_not_understand_the_others(dialect: str, foreign: str) -> None:
    bench = bench_with(dialect)
    bench.devices["supply"].execute(foreign)
    assert bench.error("supply") in (-108, -109, -113)


def test_over_voltage_latches_the_output_off(plain: Bench) -> None:
    plain.tell("supply", ":SOUR:VOLT:PROT 10;:SOUR:CURR 1;:OUTP ON;:SOUR:VOLT 11")
    assert plain.ask("supply", ":OUTP?;:VOLT:PROT:TRIP?;:CURR:PROT:TRIP?") == "0;1;0"
    assert plain.world.supply[2] is False
    assert plain.ask("supply", ":OUTP ON;:OUTP?;:SYST:ERR?").startswith("0;-221")
    plain.tell("supply", ":SOUR:VOLT 5;:SOUR:VOLT:PROT:CLE;:SOUR:CURR:PROT:CLE;:OUTP ON")
    assert plain.ask("supply", ":OUTP?;:SOUR:VOLT:PROT:TRIP?") == "1;0"


def test_over_current_level_trips_when_it_lasts(plain: Bench) -> None:
    plain.tell("supply", ":SOUR:VOLT 5;:SOUR:CURR 3;:SOUR:CURR:PROT 2;:OUTP ON")
    plain.world.current = 2.5
    assert plain.ask("supply", ":OUTP?") == "1"
    plain.tell("control", ":SIM:TIME:ADV 0.021")
    assert plain.ask("supply", ":OUTP?;:SOUR:CURR:PROT:TRIP?;:STAT:QUES:COND?") == "0;1;1024"


def test_over_current_that_began_inside_a_long_wait_has_tripped_at_its_end(plain: Bench) -> None:
    plain.tell("supply", ":SOUR:VOLT 5;:SOUR:CURR 3;:SOUR:CURR:PROT 2;:OUTP ON")
    plain.world.current = 2.5
    plain.tell("control", ":SIM:TIME:ADV 1")
    assert plain.world.supply[2] is False


@pytest.mark.parametrize(("armed", "left"), [("ON", "0"), ("OFF", "1")])
def test_list_over_current_is_the_limit_but_not_during_the_ramp(armed: str, left: str) -> None:
    bench = bench_with("supply-list")
    bench.tell("control", ":SIM:TIME:ADV 10")
    bench.world.limits = True
    bench.tell("supply", f":SOUR:VOLT 5,(@1);:SOUR:CURR:PROT:STAT {armed},(@1);:OUTP ON,(@1)")
    assert bench.ask("supply", ":OUTP? (@1);:STAT:QUES:INST:ISUM1:COND?") == "1;1"
    bench.world.limits = False  # the ramp is over in time
    bench.tell("control", ":SIM:TIME:ADV 1")
    assert bench.ask("supply", ":OUTP? (@1);:STAT:QUES:INST:ISUM1:COND?") == "1;2"
    bench.world.limits = True
    bench.tell("control", ":SIM:TIME:ADV 1")
    assert bench.ask("supply", ":OUTP? (@1)") == left
    assert bench.ask("supply", ":SOUR:CURR:PROT:TRIP? (@1)") == str(1 - int(left))
    bench.tell("supply", ":OUTP:PROT:CLE (@1)")
    assert bench.ask("supply", ":SOUR:CURR:PROT:TRIP? (@1)") == "0"


def test_select_protections_have_to_be_switched_on() -> None:
    bench = bench_with("supply-select")
    bench.tell("supply", ":INST:NSEL 1;:SOUR:VOLT:PROT 4;:SOUR:VOLT 5;:OUTP ON")
    assert bench.ask("supply", ":OUTP?;:SOUR:VOLT:PROT:STAT?") == "1;0"
    bench.tell("supply", ":SOUR:VOLT:PROT:STAT ON")
    assert bench.ask("supply", ":OUTP?;:STAT:QUES:INST:ISUM1:COND?") == "0;512"
    bench.tell("supply", ":OUTP:PROT:CLE")
    assert bench.ask("supply", ":STAT:QUES:INST:ISUM1:COND?;:STAT:QUES:INST:ISUM2:COND?") == "0;0"
    assert bench.ask("supply", ":STAT:QUES:INST:ISUM9:COND?;:SYST:ERR?").startswith("-114")


def test_constant_current_bit(plain: Bench) -> None:
    assert plain.ask("supply", ":STAT:QUES:COND?") == "0"
    plain.tell("supply", ":SOUR:VOLT 5;:OUTP ON")
    assert plain.ask("supply", ":STAT:QUES:COND?") == "2"
    plain.world.limits = True
    assert plain.ask("supply", ":STAT:QUES:COND?") == "1"


@pytest.mark.parametrize(("fault", "says"), [("stuck-output", "1"), ("lying-output", "0")])
def test_relay_faults(plain: Bench, fault: str, says: str) -> None:
    plain.tell("supply", ":SOUR:VOLT 5;:SOUR:CURR 1;:OUTP ON")
    plain.tell("control", f':SIM:FAUL "{fault}:supply",0')
    plain.tell("supply", ":OUTP OFF")
    assert plain.world.supply[2] is True
    assert plain.ask("supply", ":OUTP?") == says
    read = float(plain.ask("supply", ":MEAS:VOLT?"))
    assert read == pytest.approx(5.0 if says == "1" else 0.0, abs=0.02)
    plain.tell("supply", "*RST")
    assert plain.world.supply[2] is True
    plain.tell("control", ":SIM:FAUL:CLE")
    plain.ask("supply", "*OPC?")
    assert plain.world.supply[2] is False


def test_load_modes() -> None:
    bench = Bench()
    bench.tell("load", ":SOUR:FUNC CURR;:SOUR:CURR 2.5;:INP ON")
    mode, amps, on = bench.world.load
    assert (mode, on) == ("CURR", True)
    assert amps == pytest.approx(2.5, abs=2.5 * 0.0005 + 0.003)
    bench.tell("load", ":SOUR:RES 2 KOHM;:SOUR:FUNC RESISTANCE")
    assert bench.ask("load", ":FUNC?;:RES?;:CURR?;:INP?") == "RES;2000.0000;2.5000;1"
    assert bench.world.load[1] == pytest.approx(2000, rel=0.0006)
    assert bench.ask("load", ":SOUR:FUNC POWER;:SYST:ERR?").startswith("-224")
    assert bench.ask("load", ":SOUR:CURR 50;:SYST:ERR?").startswith("-222")
    bench.world.current = 1.5
    assert float(bench.ask("load", ":MEAS:CURR?")) == pytest.approx(1.5, abs=0.006)
    bench.tell("load", "*RST")
    assert bench.world.load[0] == "CURR"
    assert bench.world.load[2] is False
