"""Whether a run can do without a person, seen before any bench is opened."""

from __future__ import annotations

from benchkit.errors import InputError
from instruments.fixture import by_hand
from procedures.inputs import BoardInputs


def check_unattended(inputs: BoardInputs) -> None:
    """InputError unless the bench has an interlock loop and a polarity relay, and its relays do all
    that the plan has moved."""
    table, plan, path = inputs.bench.wiring, inputs.job.plan, inputs.bench_path
    missing = []
    if table is None or table.loop is None:
        missing.append("an interlock loop (wiring.loop)")
    if table is None or table.straight is None:
        missing.append("a polarity relay (wiring.straight and wiring.crossed)")
    if missing or table is None:
        raise InputError(
            f"{path}: --unattended needs {' and '.join(missing)}: without it somebody has to be "
            "there"
        )
    if plan.fuses_at_risk:
        raise InputError(
            f"{path}: --unattended is given, but the plan blows a fuse, which somebody has to "
            "replace: leave [fused_trial] out"
        )
    crosses, bleeds = True, table.bleeder is not None
    home = by_hand(plan.forward.home, crosses=crosses, bleeds=bleeds)
    for harness in plan.harnesses:
        left = by_hand(harness, crosses=crosses, bleeds=bleeds)
        if left != home:
            raise InputError(
                f"{path}: --unattended is given, but no relay of this bench does this: "
                f"{left.sentence()}"
            )
