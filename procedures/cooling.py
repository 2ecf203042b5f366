"""Waiting for a case that an earlier step left hot."""

from __future__ import annotations

from procedures.trial import Run

COOL_K = 1.0
"""A case that is this much warmer above ambient than before the sweep is as good as cold: a drop
changes by some 2 mV/K at most (common practice, no source)."""
COOL_CONSTANTS = 6.0
"""A case has cooled down after so many of its time constants, or never will."""
COOL_GAP_S = 2.0


def longest_cool_s(time_constant_s: float) -> float:
    """How long is waited at most."""
    return COOL_CONSTANTS * time_constant_s


def cool(run: Run) -> None:
    """Let the case cool, nothing on: hands are about to reach in, and what follows is compared with
    a sweep that began cold. A case that stays hot is remarked on."""
    guard, longest_s = run.guard, longest_cool_s(run.stage.file.heat.time_constant_s)
    guard.step("cool")
    began = guard.now()
    above_K = run.rest_K + COOL_K
    with run.screen.progress("cool", longest_s):
        while (warm := guard.read("case").value - guard.read("ambient").value) > above_K:
            if guard.now() - began > longest_s:
                guard.remark(
                    "not-cooled",
                    f"after {longest_s:.0f} s with nothing on the case is still {warm:.1f} K above "
                    f"ambient, {above_K:.1f} K were waited for",
                )
                break
            run.screen.advance(guard.sleep(COOL_GAP_S) - began)
