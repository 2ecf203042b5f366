"""A circuit of one's own: what is built from its file, and what is wrong with one that is not."""

from __future__ import annotations

from importlib.resources import files

import pytest

from benchkit.circuit import GROUND
from benchkit.errors import InputError
from benchkit.topologies import Ports
from tests.benchkit.example_stages import PMOS, build

Q1 = '[[network]]\npart = "Q1"\ndrain = "exposed+"\ngate = "gate"\nsource = "middle"\n'
R2 = '[[network]]\npart = "R2"\nfirst = "gate"\nsecond = "exposed-"\n'


def starter(name: str) -> str:
    return files("benchkit.files.starters").joinpath(name).read_text(encoding="utf-8")


NETWORK = starter("stage-network.toml")


def complaint(*changes: tuple[str, str], text: str = NETWORK) -> list[str]:
    with pytest.raises(InputError) as caught:
        build(text, *changes)
    assert caught.value.exit_code == 2
    lines = str(caught.value).splitlines()
    assert all(line.startswith("stage.toml: ") for line in lines)
    return [line.removeprefix("stage.toml: ") for line in lines]


def test_a_good_network_is_wired_as_its_file_says() -> None:
    stage = build(NETWORK)
    assert stage.topology is None
    assert (stage.main, stage.guards, stage.conducts) == ("Q1", "load", "channel")
    assert stage.must_stand == ("right-way", "reversed-source")
    # nothing is wired to guarded-: the minus lead runs straight through, and is the reference
    assert stage.ports == Ports("exposed+", GROUND, "guarded+", GROUND)
    assert stage.wiring.parts == {
        "Q1": ("exposed+", "gate", "middle"), "Q2": ("guarded+", "gate", "middle"),
        "Z1": ("gate", "middle"), "R1": ("gate", "middle"), "R2": ("gate", GROUND),
    }  # fmt: skip
    assert stage.gate_nodes == ("gate", "middle")


def test_the_reference_is_the_minus_of_the_port_that_is_driven() -> None:
    """With both leads broken the port terminals are four nodes."""
    broken = (
        f'{R2}[[network]]\npart = "R3"\nfirst = "exposed-"\nsecond = "guarded-"\n'
        '[parts.R3]\nkind = "resistor"\nvalue_ohm = 0.01\npower_max_W = 1\n'
    )
    assert build(NETWORK, (R2, broken)).ports == Ports("exposed+", GROUND, "guarded+", "guarded-")
    charger = build(NETWORK, (R2, broken), ('guards = "load"', 'guards = "supply"'))
    assert charger.ports == Ports("exposed+", "exposed-", "guarded+", GROUND)


@pytest.mark.parametrize(
    ("name", "topology", "main", "guards"),
    [
        ("stage-charger.toml", "pmos-sensed", "Q1", "supply"),
        ("stage-clamp.toml", "fused-clamp", "D1", "supply"),
        ("stage-network.toml", "network", "Q1", "load"),
    ],
)
def test_starters_build(name: str, topology: str, main: str, guards: str) -> None:
    stage = build(starter(name))
    assert stage.file.stage.topology == topology
    assert (stage.main, stage.guards) == (main, guards)
    assert set(stage.wiring.parts) == set(stage.file.parts)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ((R2, R2.replace("R2", "R7") + R2),
         "network[5].part is 'R7': it must be one of Q1, Q2, Z1, R1, R2"),
        ((R2, R2 + R2),
         "network[6].part is 'R2', which is wired already: each part has one entry"),
        (('gate = "gate"\n', ""),
         "network[1] wires drain, source of Q1, a p-mosfet: it must wire drain, gate, source"),
        (('anode = "gate"\n', 'anode = "gate"\nbase = "gate"\n'),
         "network[3] wires anode, cathode, base of Z1, a zener: it must wire anode, cathode"),
        (('second = "exposed-"', 'second = "0"'),
         "network[5] wires R2 to '0': a node is exposed+, exposed-, guarded+, guarded- or a name "
         "of your own without a dot, and not 0"),
        (('second = "exposed-"', 'second = "lead.minus"'),
         "network[5] wires R2 to 'lead.minus': a node is exposed+, exposed-, guarded+, guarded- or "
         "a name of your own without a dot, and not 0"),
        ((R2, ""), "parts.R2 is wired to nothing: give it an entry in [[network]]"),
        (('drain = "guarded+"', 'drain = "guarded"'),
         "network wires Q2 to 'guarded' and nothing else is wired there: a node that is no port "
         "joins two terminals; the nodes are exposed+, exposed-, gate, guarded, guarded+, "
         "guarded-, middle"),
        (('first = "gate"\n', 'frist = "gate"\n'),
         "network[4].frist is not a key here; the nearest right one is first"),
        # [stage] of a network
        (('main = "Q1"', ""),
         "stage.main is missing: with a network it must be the part that carries the working "
         "current, one of Q1, Q2, Z1, R1, R2"),
        (('main = "Q1"', 'main = "Q9"'),
         "stage.main is 'Q9': with a network it must be the part that carries the working "
         "current, one of Q1, Q2, Z1, R1, R2"),
        (('main = "Q1"', 'main = "R1"'),
         "stage.main is 'R1', a resistor: the part whose case is measured must be a diode, a tvs "
         "or a MOSFET"),
        (('main = "Q1"', 'main = "Q2"'),
         "parts.Q2.junction_to_case_K_per_W is missing: it is the part whose case is measured"),
        (('guards = "load" ', ""),
         'stage.guards is missing: with a network it is "load" or "supply"'),
        (('topology = "network"', 'topology = "pmos-pass"'),
         '[[network]] is for stage.topology "network"; here it is "pmos-pass": leave the table '
         "out, or change the topology"),
    ],
)  # fmt: skip
def test_one_mistake_is_one_sentence(change: tuple[str, str], message: str) -> None:
    assert complaint(change) == [message]


def test_a_network_without_entries() -> None:
    changes = ('topology = "pmos-pass"', 'topology = "network"\nguards = "load"\nmain = "Q1"')
    assert complaint(changes, text=PMOS) == [
        'stage.topology is "network": [[network]] must say what each part is wired to'
    ]


def test_main_is_for_a_network_only() -> None:
    assert complaint(('"pmos-pass"', '"pmos-pass"\nmain = "Q1"'), text=PMOS) == [
        "stage.main is 'Q1', which is for stage.topology \"network\" only: leave it out, here it "
        'is "pmos-pass"'
    ]


def test_a_scenario_that_there_is_not() -> None:
    [said] = complaint(('guards = "load"', 'guards = "load"\nmust_stand = ["right-way", "upside"]'))
    assert said.startswith("stage.must_stand[2] is 'upside', it must be 'right-way', 'reversed-")
    given = build(NETWORK, ('guards = "load"', 'guards = "load"\nmust_stand = ["back-feed"]'))
    assert given.must_stand == ("back-feed",)


def test_kinds_are_named_with_their_article() -> None:
    assert complaint(('kind = "p-mosfet"', 'kind = "n-mosfet"'), ('gate = "gate"\n', "")) == [
        "network[1] wires drain, source of Q1, an n-mosfet: it must wire drain, gate, source"
    ]


def test_mistakes_in_several_entries_are_said_at_once() -> None:
    assert complaint((Q1, ""), ('second = "exposed-"', 'second = "0"')) == [
        "network[4] wires R2 to '0': a node is exposed+, exposed-, guarded+, guarded- or a name of "
        "your own without a dot, and not 0",
        "parts.Q1 is wired to nothing: give it an entry in [[network]]",
    ]
