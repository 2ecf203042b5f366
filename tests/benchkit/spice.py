"""Many operating points from one ngspice process. The version seen beside these checks is 39."""

from __future__ import annotations

import re
import subprocess
from collections.abc import Iterable, Mapping
from pathlib import Path

Found = dict[str, float]


def operating_points(
    program: str, folder: Path, decks: Mapping[str, str], asked: Iterable[str] = ()
) -> dict[str, Found]:
    """Node voltages and source currents of each deck, by its key.

    asked: further quantities, such as ``@d1[id]``; a deck without that device goes without.
    """
    # A lone vector would be printed under the name "all".
    printed = ["let another = 1", "print all", *(f"print {quantity}" for quantity in asked)]
    lines = ["* runner", ".control", "set numdgt=12"]
    for number, (key, deck) in enumerate(decks.items()):
        path = folder / f"deck{number}.cir"
        path.write_text(deck, encoding="ascii")
        lines += [f"echo deck {key}", f"source {path}", "op", *printed]
        lines += ["destroy all", "remcirc"]
    runner = folder / "runner.cir"
    runner.write_text("\n".join([*lines, "quit 0", ".endc", ".end", ""]), encoding="ascii")
    done = subprocess.run(
        [program, "-b", str(runner)], capture_output=True, text=True, timeout=120, check=True
    )
    return _read(done.stdout, decks)


def _read(printed: str, decks: Mapping[str, str]) -> dict[str, Found]:
    found: dict[str, Found] = {}
    for key, body in zip(decks, re.split(r"^deck ", printed, flags=re.M)[1:], strict=True):
        assert body.split("\n", 1)[0].strip() == key
        found[key] = {
            name: float(value)
            for name, value in re.findall(r"^(\S+) = (-?\d\S*)\s*$", body, flags=re.M)
        }
        assert found[key], f"{key}: ngspice solved nothing:\n{body}"
    return found
