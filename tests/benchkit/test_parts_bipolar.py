"""The Ebers-Moll law, its fit to a sheet's points, and what contradicts itself."""

from __future__ import annotations

import math
import os
import re
import shutil
import subprocess
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from pydantic import ValidationError

from benchkit.errors import InputError
from benchkit.files.parts import Bipolar
from benchkit.parts.bipolar import BipolarAt, BipolarLaw
from benchkit.parts.bipolar_points import BipolarModel, bipolar_model
from benchkit.parts.knee import KneeLaw

Floats = NDArray[np.float64]

VT = 1.380649e-23 * 298.15 / 1.602176634e-19
"""Thermal voltage at 25 C from the SI's exact constants."""

SHEET: Mapping[str, Any] = {
    "kind": "npn",
    "gain": {"min": 100.0, "max": 300.0, "typ": 180.0, "current_A": 0.01},
    "base_emitter": [{"current_A": 0.002, "typ_V": 0.66, "max_V": 0.72}],
    "saturation": {"collector_A": 0.01, "base_A": 0.0005, "typ_V": 0.09, "max_V": 0.25},
    "breakdown": {"typ_V": 7.2, "current_A": 1e-5},
    "leakage": {"collector_base_V": 30.0, "typ_A": 1e-9, "max_A": 15e-9},
    "collector_emitter_max_V": 45.0,
    "emitter_base_max_V": 6.0,
    "collector_current_max_A": 0.1,
    "junction_max_C": 150.0,
}


def model(**changes: object) -> BipolarModel:
    """Of the sheet above with some keys changed; None takes a key away."""
    kept = {key: value for key, value in {**SHEET, **changes}.items() if value is not None}
    return bipolar_model("Q2", Bipolar.model_validate(kept))


def score(a: float = 0.0, b: float = 0.0, c: float = 0.0) -> BipolarLaw:
    return model().sample(*(np.array([float(value)]) for value in (a, b, c)))


def one(*volts: float) -> tuple[Floats, ...]:
    return tuple(np.array([value]) for value in volts)


def bare(gain: float = 150.0, reverse: float = 2.0, leakage: float = 0.0) -> BipolarLaw:
    return BipolarLaw(2e-14, gain, reverse, 0.5, KneeLaw(7.0, 1e-5, 0.03, 20.0, 3e-3), leakage)


def test_printed_points_are_reproduced() -> None:
    law = model().typical
    ic, ib, *_ = law.at(25.0).current(*one(0.66, -5.0))
    assert ic[0] == pytest.approx(0.002, rel=1e-5)
    assert ic[0] / ib[0] == pytest.approx(180.0, rel=1e-4)
    assert float(law.saturation_V(0.01, 0.0005)) == pytest.approx(0.09, rel=1e-9)
    reverse_A = -law.at(25.0).current(*one(-7.2, -7.2))[1][0]
    assert reverse_A == pytest.approx(1e-5, rel=1e-3)


def test_limits_are_met_at_three_standard_deviations() -> None:
    weak = score(a=3)
    assert weak.forward_gain == pytest.approx([100.0])
    assert weak.saturation_V(0.01, 0.0005) == pytest.approx([0.25])
    assert score(a=-3).forward_gain == pytest.approx([300.0])
    high = score(b=3).at(25.0).current(*one(0.72, -5.0))[0]
    assert high == pytest.approx([0.002], rel=1e-5)
    # VEBO is what every part stands: the lowest breakdown is there, and mirrored above.
    assert score(c=-3).breakdown.volts_V == pytest.approx([6.0])
    assert score(c=3).breakdown.volts_V == pytest.approx([8.4])
    assert score(c=3).leakage_A == pytest.approx([15e-9])


def test_saturation_against_the_textbook() -> None:
    """Ebers and Moll's VCE(sat) = Vt ln[(1 + (Ic/Ib)(1 - aR)) / (aR (1 - (Ic/Ib)/Bf))], with
    aR = Br/(1 + Br) (as in Getreu, "Modeling the Bipolar Transistor"; from memory), and the law
    itself solved at both currents by scipy."""
    from scipy.optimize import fsolve

    law = bare()
    for forced in (5.0, 20.0, 100.0):
        base = 1e-3
        alpha = 2.0 / 3.0
        book = VT * math.log((1 + forced * (1 - alpha)) / (alpha * (1 - forced / 150.0)))
        found = float(law.saturation_V(forced * base, base)) - forced * base * 0.5
        assert found == pytest.approx(book, rel=1e-6)

        at = law.at(25.0)

        def off(volts: Floats, at: BipolarAt = at, ic: float = forced * base) -> Floats:
            got = at.current(*one(*volts))
            return np.array([got[0][0] / ic - 1, got[1][0] / 1e-3 - 1])

        be, bc = fsolve(off, [0.7, 0.65], xtol=1e-12)
        assert be - bc == pytest.approx(book, rel=1e-6)


def test_no_saturation_beyond_the_gain() -> None:
    assert float(bare().saturation_V(0.2, 1e-3)) == math.inf


def test_reciprocity() -> None:
    """alphaF IES = alphaR ICS (Ebers and Moll 1954): a junction alone, the other one shorted."""
    at = bare().at(60.0)
    volts = 0.5
    ic, ib, *_ = at.current(*one(volts, 0.0))
    alpha_f_ies = ic[0]
    assert ic[0] / (ic[0] + ib[0]) == pytest.approx(1 / (1 + at.forward_share))
    ic, ib, *_ = at.current(*one(0.0, volts))
    assert -(ic[0] + ib[0]) == pytest.approx(alpha_f_ies, rel=1e-12)


def test_base_emitter_voltage_falls_by_two_millivolts_per_kelvin() -> None:
    """Common practice, no source."""
    law = model().typical
    cold, warm = (law.at(t).current(*one(0.66, -5.0))[0][0] for t in (25.0, 26.0))
    assert -2.5e-3 < -VT * math.log(warm / cold) < -1.5e-3


@pytest.mark.parametrize("kelvin", [-60.0, 0.0, 100.0])
def test_leakage_doubles_every_ten_kelvin(kelvin: float) -> None:
    """Common practice, no source. ICBO: emitter at the base."""
    law = bare(leakage=1e-7)
    at = law.at(25.0 + kelvin)
    own = float(np.asarray(at.saturation_A * (1 + at.reverse_share)))
    leak = at.current(*one(0.0, -30.0))[0][0] - own
    assert leak == pytest.approx(1e-7 * 2 ** (kelvin / 10), rel=1e-6)


VOLTS = st.one_of(st.floats(-40, 1.2), st.floats(-1000, 1000), st.sampled_from([0.0]))


@settings(derandomize=True, deadline=None, max_examples=300)
@given(VOLTS, VOLTS, st.floats(-40, 150), st.floats(20, 1000), st.floats(0.1, 20))
def test_slopes_are_the_derivatives(
    be: float, bc: float, junction_C: float, gain: float, reverse: float
) -> None:
    """By central differences, as far as rounding lets them tell."""
    at = bare(gain, reverse, 1e-9).at(junction_C)
    _, _, ic_be, ic_bc, ib_be, ib_bc = at.current(*one(be, bc))
    step = 1e-6 * max(1.0, abs(be) / 10, abs(bc) / 10)
    for by_c, by_b, way in ((ic_be, ib_be, (step, 0.0)), (ic_bc, ib_bc, (0.0, step))):
        up = at.current(*one(be + way[0], bc + way[1]))
        down = at.current(*one(be - way[0], bc - way[1]))
        for slope, k in ((by_c, 0), (by_b, 1)):
            difference = (up[k][0] - down[k][0]) / (2 * step)
            noise = 1e-14 * max(abs(up[k][0]), abs(down[k][0])) / step
            assert difference == pytest.approx(slope[0], rel=2e-4, abs=noise + 1e-12)


@settings(derandomize=True, deadline=None, max_examples=300)
@given(VOLTS, VOLTS, st.floats(1e-6, 5), st.floats(-40, 150))
def test_currents_are_monotone_and_signs_are_right(
    be: float, bc: float, step: float, junction_C: float
) -> None:
    at = bare(leakage=1e-8).at(junction_C)
    at_volts = ((be, bc), (be + step, bc), (be, bc + step))
    start, by_be, by_bc = (at.current(*one(*volts)) for volts in at_volts)
    for values in (start, by_be, by_bc):
        assert all(np.isfinite(value).all() for value in values)
        assert values[2][0] >= 0
        assert values[3][0] <= 0
        assert values[4][0] >= 0
        assert values[5][0] >= 0
    assert by_be[0][0] >= start[0][0]
    assert by_be[1][0] >= start[1][0]
    assert by_bc[0][0] <= start[0][0]
    assert by_bc[1][0] >= start[1][0]
    # It never gives power away: what flows into base and collector, times voltages to the emitter.
    power = start[1][0] * be + start[0][0] * (be - bc)
    size = abs(start[1][0] * be) + abs(start[0][0] * (be - bc))
    assert power >= -1e-12 * size


@pytest.mark.parametrize("celsius", [-40.0, 25.0, 125.0])
@pytest.mark.parametrize(("be", "bc"), [(0.62, -5.0), (0.72, 0.66), (0.3, 0.6), (0.5, 0.5)])
def test_against_ngspice(tmp_path: Path, be: float, bc: float, celsius: float) -> None:
    """A simulator that nobody here wrote; Early voltages and high-level injection left out."""
    program = shutil.which("ngspice")
    if program is None:
        if os.environ.get("CI"):
            pytest.fail("ngspice is missing: apt-get install ngspice")
        pytest.skip("ngspice is not installed on this machine")
    deck = (
        f"* hand-written\nq1 c b 0 law\nvb b 0 {be}\nvc c 0 {be - bc}\n"
        ".model law npn(is=2e-14 bf=150 br=2 xtb=1.5 eg=1.11 xti=3)\n"
        ".options reltol=1e-9 abstol=1e-16 vntol=1e-12 gmin=1e-16 tnom=25\n"
        f".temp {celsius}\n"
        ".control\nset numdgt=12\nop\nprint i(vc) i(vb)\nquit 0\n.endc\n.end\n"
    )
    path = tmp_path / "deck.cir"
    path.write_text(deck, encoding="ascii")
    done = subprocess.run(
        [program, "-b", str(path)], capture_output=True, text=True, timeout=60, check=True
    )
    found = [-float(v) for v in re.findall(r"i\(v[cb]\) = (\S+)", done.stdout)]
    ic, ib, *_ = bare().at(celsius).current(*one(be, bc))
    # Its constants k and q differ from the SI's in the fifth or sixth figure.
    assert [ic[0], ib[0]] == pytest.approx(found, rel=5e-5)


def test_nothing_flows_at_no_voltage() -> None:
    ic, ib, *_ = bare(leakage=1e-7).at(150.0).current(*one(0.0, 0.0))
    assert (ic[0], ib[0]) == (0.0, 0.0)


def test_continued_linearly_in_value_and_slope() -> None:
    at = bare().at(25.0)
    edge = float(np.asarray(at.ceiling * at.scale_V))
    below, above = (at.current(*one(edge + d, 0.0)) for d in (-1e-9, 1e-9))
    assert below[0][0] == pytest.approx(100.0, rel=1e-6)
    assert above[0][0] == pytest.approx(below[0][0], rel=1e-6)
    assert above[2][0] == pytest.approx(below[2][0], rel=1e-6)
    far = at.current(*one(edge + 10.0, 0.0))
    assert far[0][0] == pytest.approx(100.0 + 10.0 * above[2][0], rel=1e-6)


def test_breakdown_flows_out_of_the_base_and_not_through_the_collector() -> None:
    ic, ib, *_ = bare().at(25.0).current(*one(-9.0, -14.0))
    # About (9 - 7) V over 20 ohm, less the knee's own width.
    assert -0.1 < ib[0] < -0.08
    assert abs(ic[0]) < 1e-12


def test_a_batch_is_its_entries() -> None:
    law = model().sample(*(np.array([-1.0, 0.0, 2.0]) for _ in range(3)))
    at = law.at(np.array([-40.0, 25.0, 125.0]))
    whole = at.current(np.array([0.6, -8.0, 0.7]), np.array([-5.0, -12.0, 0.65]))
    for k in range(3):
        alone = model().sample(*(np.array([[-1.0, 0.0, 2.0][k]]) for _ in range(3)))
        part = alone.at([-40.0, 25.0, 125.0][k]).current(
            *one([0.6, -8.0, 0.7][k], [-5.0, -12.0, 0.65][k])
        )
        assert [v[k] for v in whole] == pytest.approx([v[0] for v in part], rel=1e-12)


def test_saturation_below_the_usual_raises_the_reverse_gain() -> None:
    """SPICE's default reverse gain is 1; a print above what it gives is resistance."""
    low = model(saturation={"collector_A": 0.01, "base_A": 0.0005, "typ_V": 0.05}).typical
    assert low.reverse_gain > 1.0
    assert low.collector_ohm == pytest.approx(1e-3)
    assert float(low.saturation_V(0.01, 0.0005)) == pytest.approx(0.05, rel=1e-3)
    high = model(saturation={"collector_A": 0.01, "base_A": 0.0005, "max_V": 0.2})
    assert high.typical.reverse_gain == 1.0
    assert 10 < float(high.typical.collector_ohm) < 13
    assert any("the maximum is taken of all" in note for note in high.notes)


def test_what_is_assumed_is_said() -> None:
    lone = model(
        gain={"min": 100.0, "max": 400.0, "current_A": 0.01},
        base_emitter=[{"current_A": 0.002, "typ_V": 0.66}], breakdown=None, leakage=None,
    )  # fmt: skip
    assert lone.typical.forward_gain == pytest.approx(200.0)
    assert lone.typical.breakdown.volts_V == pytest.approx(7.8)
    notes = " / ".join(lone.notes)
    for words in (
        "no typical gain is printed; 200", "no maximum base-emitter voltage is printed",
        "it is taken to be at 7.8 V, 1.3 times its rating of 6 V", "no collector leakage is given",
    ):  # fmt: skip
        assert words in notes
    bent = [{"current_A": 0.002, "typ_V": 0.66}, {"current_A": 0.05, "typ_V": 0.80}]
    assert any("off by +57 mV at 0.05 A" in note for note in model(base_emitter=bent).notes)
    strong = {"collector_A": 0.1, "base_A": 0.0008, "typ_V": 0.2}
    assert any("at its lowest gain of 100" in note for note in model(saturation=strong).notes)


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        (
            {"saturation": {"collector_A": 0.1, "base_A": 0.0005, "typ_V": 0.2}},
            "parts.Q2.saturation contradicts parts.Q2.gain: 0.0005 A into the base with a gain of "
            "180 is not enough for 0.1 A; saturation is printed for a base that is overdriven",
        ),
        (
            {"saturation": {"collector_A": 0.01, "base_A": 0.0005, "typ_V": 0.0009}},
            "parts.Q2.saturation contradicts parts.Q2.gain: 0.0009 V is below 0.0059 V, what a "
            "transistor with a gain of 180 can saturate to at these currents; check its voltage "
            "and both currents",
        ),
        (
            {
                "base_emitter": [
                    {"current_A": 0.002, "typ_V": 0.66},
                    {"current_A": 0.1, "typ_V": 0.65},
                ]
            },
            "parts.Q2.base_emitter contradicts itself: it rises by -10 mV from 0.002 A to 0.1 A; "
            "a junction at 25 C rises by about 101 mV between them",
        ),
        (
            {
                "base_emitter": [
                    {"current_A": 0.002, "typ_V": 0.66},
                    {"current_A": 0.002, "typ_V": 0.7},
                ]
            },
            "parts.Q2.base_emitter has two points at 0.002 A: give one",
        ),
        (
            {"breakdown": {"typ_V": 5.5, "current_A": 1e-5}},
            "parts.Q2.breakdown.typ_V is 5.5: it must not be below emitter_base_max_V 6, which "
            "every part stands",
        ),
    ],
)
def test_contradictions_are_named(changes: dict[str, object], message: str) -> None:
    with pytest.raises(InputError) as caught:
        model(**changes)
    assert str(caught.value) == message


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"gain": {"min": 200.0, "max": 100.0, "current_A": 0.01}}, "must rise in that order"),
        ({"saturation": {"collector_A": 0.01, "base_A": 0.001}}, "typ_V or max_V must be given"),
        ({"leakage": {"collector_base_V": 30.0}}, "typ_A or max_A must be given"),
        ({"base_emitter": []}, "at least 1 item"),
    ],
)
def test_tables_that_make_no_sense(changes: dict[str, object], words: str) -> None:
    with pytest.raises(ValidationError, match=words):
        model(**changes)
