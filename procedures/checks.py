"""What the guard will check, and when, for the plan."""

from __future__ import annotations

from benchkit.files import BenchFile
from benchkit.guard.envelope import HARMLESS_REVERSED_A, PROOF_A, PROOF_V


def checks_of(bench: BenchFile) -> tuple[str, ...]:
    """A sentence for each moment; the values are those of this bench file."""
    t, poll_s = bench.guard, bench.bench.poll_s
    looped = bench.wiring is not None and bench.wiring.loop is not None
    loop = "the interlock loop closed, " if looped else ""
    opened = "the loop opened, " if looped else ""
    return (
        f"before anything is on: calibration in date, {loop}outputs found off (on: switched off "
        f"and told), both ports below {t.residual_V:g} V, case and ambient between "
        f"{t.sensor_min_C:g} and {t.sensor_max_C:g} C and within {t.rest_K:g} K of each other",
        f"before any lead is moved, by hand or relay: outputs confirmed off, both ports below "
        f"{t.residual_V:g} V by three channels; after it: which way round they are, measured at "
        f"{PROOF_V:g} V and {1e3 * PROOF_A:g} mA",
        f"before every step: {loop}the caution accepted, over-voltage and over-current levels "
        "read back, polarity proved; with crossed leads and more than "
        f"{HARMLESS_REVERSED_A:g} A a fuse that is declared, coordinated and found in place",
        f"every {poll_s:g} s while something is on: {opened}the supply's own protection, its "
        "output, voltage, current and an unexpected current limit; case, its rise "
        f"({t.case_rise_max_K_per_s:g} K/s) and whether it moves at all ({t.frozen_s:g} s); "
        "energy, time, and that the look came in time; by turns the guarded port's sign and the "
        f"supply's own voltage against the meter's (within {t.apart_V:g} V and "
        f"{t.apart_percent:g} %)",
        f"with every reading: a lost sensor, loss, and the three meter channels against each other "
        f"(within {1e3 * t.mesh_V:g} mV and {t.mesh_percent:g} %)",
        f"at every way out: output off first, then read back, then measured: below "
        f"{t.residual_V:g} V and {1e3 * t.off_A:g} mA within {t.discharge_s:g} s, or exit code 4",
    )
