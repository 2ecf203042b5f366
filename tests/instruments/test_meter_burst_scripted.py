"""A timed burst of the meter over a scripted peer, for what the simulated meters would not do."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import pytest

from benchkit.errors import InputError
from instruments.errors import BadAnswer, NoAnswer, NotConfirmed, OutOfStep
from instruments.meter import ScpiMeter
from tests.instruments.scripted import Fault, Instrument, Peer, serving, session_with
from tests.instruments.test_meter_burst import SCAN, TIMES


@pytest.fixture
def instrument() -> Instrument:
    return Instrument(answers={":FETC?": "1,2,3,4,5,6", ":TRIG:TIM?": "0.01"})


@pytest.fixture
def peer(instrument: Instrument) -> Iterator[Peer]:
    def message(text: str) -> str | None:
        return instrument.message(text.replace(":CONF:VOLT:DC ", ":SENS:VOLT:DC:RANG "))

    with serving(message) as peer:
        yield peer


@pytest.fixture
def meter(peer: Peer) -> Iterator[ScpiMeter]:
    with session_with(peer, TIMES) as session:
        peer.messages.clear()
        yield ScpiMeter(session, SCAN)


def arm_scripted(meter: ScpiMeter, interval_s: float = 0.01) -> None:
    meter.arm_burst(["101", "102"], [1.0, 1.0], 3, interval_s)


def test_readings_come_scan_by_scan(meter: ScpiMeter, instrument: Instrument) -> None:
    arm_scripted(meter)
    assert meter.fetch_burst().tolist() == [[1, 2], [3, 4], [5, 6]]
    instrument.answers[":FETC?"] = "+1.0E+00,9.9E37,-9.90000000E+37,9.91E+37,12 MV,0"
    volts = meter.fetch_burst()
    assert np.isnan(volts[1, 1])
    volts[1, 1] = 0.0
    assert volts.tolist() == [[1.0, math.inf], [-math.inf, 0.0], [0.012, 0.0]]


@pytest.mark.parametrize("answer", ["1,2,3,4,5", "1,2,3,4,5,6,7", "1,2,3,4,5,x", "1,2,3,4,5,"])
def test_an_answer_of_another_size_is_none(
    meter: ScpiMeter, instrument: Instrument, answer: str
) -> None:
    arm_scripted(meter)
    instrument.answers[":FETC?"] = answer
    with pytest.raises(BadAnswer):
        meter.fetch_burst()
    with pytest.raises(OutOfStep):
        meter.fetch_burst()


def test_a_timer_that_reads_back_otherwise_starts_nothing(meter: ScpiMeter, peer: Peer) -> None:
    """Meters round the interval to what their timer can do."""
    with pytest.raises(NotConfirmed, match=r"asked for 0\.0104, but it reads back as 0\.01 "):
        arm_scripted(meter, 0.0104)
    assert not any(":INIT" in text for text in peer.messages)
    # The trigger system is no longer what configuring made it.
    meter.configure("101", 1.0, 0.02)
    assert peer.messages[-2].startswith(":ABOR")
    assert ":CONF:VOLT:DC 1,(@101)" in peer.messages[-1]


def test_fetching_allows_as_long_as_the_burst_takes(
    meter: ScpiMeter, peer: Peer, instrument: Instrument
) -> None:
    slow = Fault(":FETC?", delay_s=TIMES.read_s + 0.2)
    instrument.answers[":TRIG:TIM?"] = "0.2"
    arm_scripted(meter, 0.2)  # 600 ms
    peer.faults = [slow]
    assert meter.fetch_burst().shape == (3, 2)
    instrument.answers[":TRIG:TIM?"] = "0.01"
    arm_scripted(meter)  # 30 ms
    peer.faults = [slow]
    with pytest.raises(NoAnswer):
        meter.fetch_burst()


def test_a_lost_answer_is_fetched_again(meter: ScpiMeter, peer: Peer) -> None:
    arm_scripted(meter)
    peer.faults = [Fault(":FETC?", lost=True)]
    with pytest.raises(NoAnswer):
        meter.fetch_burst()
    meter.recover()
    assert meter.fetch_burst().shape == (3, 2)


def test_a_meter_without_the_table_cannot(peer: Peer) -> None:
    with session_with(peer, TIMES) as session:
        meter = ScpiMeter(session, SCAN.model_copy(update={"burst": None, "name": "own"}))
        assert not meter.can_burst
        assert ScpiMeter(session, SCAN).can_burst
        peer.messages.clear()
        for call in (
            lambda: arm_scripted(meter),
            meter.fetch_burst,
            lambda: meter.shortest_interval_s(1),
        ):
            with pytest.raises(InputError, match=r"its dialect own has no \[burst\] table"):
                call()
        assert peer.messages == []


def test_a_dialect_that_lists_no_routes_bursts_one(peer: Peer, instrument: Instrument) -> None:
    assert SCAN.burst is not None
    prepare = SCAN.burst.prepare.replace("(@{routes})", "(@101)")
    burst = SCAN.burst.model_copy(update={"prepare": prepare})
    instrument.answers[":FETC?"] = "1,2,3"
    with session_with(peer, TIMES) as session:
        meter = ScpiMeter(session, SCAN.model_copy(update={"burst": burst}))
        with pytest.raises(InputError, match="can take a burst of one route only, not 2"):
            arm_scripted(meter)
        meter.arm_burst(["101"], [1.0], 3, 0.01)
        assert meter.fetch_burst().tolist() == [[1], [2], [3]]
