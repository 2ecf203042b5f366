"""What a person reads when the parts of a stage file do not fill its topology's roles."""

from __future__ import annotations

import pytest

from benchkit.errors import InputError
from tests.benchkit.nine_stages import PARTS, made, resistor

PLAIN = 'kind = "resistor"\nvalue_ohm = 1000\npower_max_W = 0.25\n'
FITS = "its parts are pass (p-mosfet), gate (resistor), fuse (fuse), lead (lead)"


def complaint(topology: str, **parts: str | None) -> list[str]:
    with pytest.raises(InputError) as caught:
        made(topology, "", "", **parts)
    assert caught.value.exit_code == 2
    lines = str(caught.value).splitlines()
    assert all(line.startswith("stage.toml: ") for line in lines)
    return [line.removeprefix("stage.toml: ") for line in lines]


def test_two_resistors_without_role() -> None:
    assert complaint("pmos-sensed", R1=PLAIN, R2=PLAIN) == [
        "parts.R1 and parts.R2 have no role: for a resistor of topology pmos-sensed it must be "
        "'hold', 'pull', 'base' or 'bleed'"
    ]


def test_one_resistor_without_role_that_could_be_either() -> None:
    assert complaint("pmos-sensed", R1=PLAIN, R2=None) == [
        "parts.R1 has no role: for a resistor of topology pmos-sensed it must be 'hold', 'pull', "
        "'base' or 'bleed'"
    ]


def test_a_role_that_the_topology_does_not_have() -> None:
    assert complaint("pmos-sensed", R1=resistor(1000, "gate")) == [
        "parts.R1.role is 'gate', which topology pmos-sensed does not have: for a resistor it must "
        "be 'hold', 'pull', 'base' or 'bleed'"
    ]


def test_a_role_of_another_kind_of_part() -> None:
    assert complaint("pmos-sensed", R1=resistor(1000, "protect")) == [
        "parts.R1.role is 'protect', which in topology pmos-sensed is a diode: for a resistor it "
        "must be 'hold', 'pull', 'base' or 'bleed'"
    ]


def test_a_role_given_twice() -> None:
    assert complaint("pmos-sensed", R1=resistor(1000, "base")) == [
        "parts.R2.role is 'base', and so is parts.R1.role: only one can be, the other must be "
        "'hold', 'pull' or 'bleed'"
    ]
    assert complaint("pmos-pass", R2=resistor(1000, "gate")) == [
        "parts.R2.role is 'gate', and so is parts.R1.role: only one can be, leave the other out"
    ]


@pytest.mark.parametrize(
    ("topology", "part", "needed"),
    [
        ("pmos-sensed", "R2", "a resistor as its 'base'"),
        ("nmos-sensed", "Q2", "a pnp as its 'sense'"),
        ("pmos-sensed", "Q2", "an npn as its 'sense'"),
        ("nmos-pass", "Q1", "an n-mosfet as its 'pass'"),
        ("pmos-pass-zener", "R1", "a resistor as its 'gate'"),
        ("pmos-pass-zener", "Z1", "a zener as its 'zener'"),
        ("fused-clamp", "D1", "a diode or a tvs as its 'clamp'"),
        ("fused-clamp", "F1", "a fuse as its 'fuse'"),
    ],
)
def test_a_part_that_is_missing(topology: str, part: str, needed: str) -> None:
    assert complaint(topology, **{part: None}) == [
        f"topology {topology} needs {needed}, and none of the parts is that"
    ]


def test_all_that_is_missing_is_said_at_once() -> None:
    assert complaint("pmos-sensed", R1=None, R2=None) == [
        f"topology pmos-sensed needs a resistor as its {role!r}, and none of the parts is that"
        for role in ("hold", "base")
    ]


def test_a_part_of_a_kind_that_has_no_place() -> None:
    zener = f"parts.Z1 is a zener, which topology pmos-pass has no place for; {FITS}"
    assert complaint("pmos-pass", Z1=PARTS["zener"]) == [zener]
    assert complaint("pmos-pass", Z1=f'role = "zener"\n{PARTS["zener"]}') == [zener]
    npn = f'kind = "npn"\n{PARTS["bipolar"]}'
    assert complaint("series-diode", Q2=npn) == [
        "parts.Q2 is an npn, which topology series-diode has no place for; its parts are diode "
        "(diode), fuse (fuse), lead (lead)"
    ]


def test_a_part_too_many() -> None:
    diode = PARTS["schottky"]
    assert complaint("series-diode", D2=diode) == [
        "parts.D1 and parts.D2 are each a diode, which is too many: topology series-diode takes no "
        "more than one as its 'diode'"
    ]
    assert complaint("series-diode", D1=f'role = "diode"\n{diode}', D2=diode) == [
        "parts.D2 is a diode too many: topology series-diode takes one as its 'diode', which is "
        "parts.D1, and no other"
    ]
    roles = {f"R{n}": resistor(1000, role) for n, role in enumerate(("hold", "base", "pull"), 1)}
    assert complaint("pmos-sensed", **roles, R4=PLAIN, R5=PLAIN) == [
        "parts.R4 and parts.R5 are each a resistor, which is too many: topology pmos-sensed takes "
        "no more than one as its 'bleed'"
    ]


def test_a_wrong_part_leaves_the_role_of_the_right_one_missing() -> None:
    channel = f'kind = "n-mosfet"\n{PARTS["mosfet"]}'
    assert complaint("pmos-pass", Q1=channel) == [
        f"parts.Q1 is an n-mosfet, which topology pmos-pass has no place for; {FITS}",
        "topology pmos-pass needs a p-mosfet as its 'pass', and none of the parts is that",
    ]


def test_a_role_where_the_kind_leaves_no_choice() -> None:
    """A part without a role takes the only place that is left, or the only one that must be."""
    stage = made("pmos-sensed", R1=PLAIN, R3=resistor(22e3, "bleed"))
    assert stage.names == {
        "pass": "Q1", "hold": "R1", "base": "R2", "sense": "Q2", "protect": "D1", "bleed": "R3",
    }  # fmt: skip
    _, gate, source = stage.wiring.parts["Q1"]
    assert stage.wiring.parts["R1"] == (gate, source)


def test_the_main_part_needs_its_way_to_the_case() -> None:
    assert complaint("series-diode", D1=PARTS["signal"]) == [
        "parts.D1.junction_to_case_K_per_W is missing: it is the part whose case is measured"
    ]
