"""Whatever fails at a random moment: is everything off at the end, and nothing wrong passed?

    python -m tests.campaigns.faults [--trials 5000] [--seed N] [--workers 2] [--only N]

A trial measures one board, with the stage, bench, fault or faults (of the part, of the bench, of an
instrument or its link; none now and then) and moments that its number draws. The guard, adapters
and sockets are those of every run; the simulated bench writes down what was truly so
(``tests.campaigns.faults_world``), and the trial is held against that.

The last line is a JSON object. What must be 0: ``left_on_unreported`` (something is on at the end,
and the run did not end as NotConfirmedOff), ``false_off`` (the record says that off was confirmed
and something was on), ``wrong_pass`` (``faults_pass``), ``over_rating`` (a quantity that the guard
watches was beyond its threshold, or a fault that must end the step was there, for longer than the
guard's blind time and one command, and nobody was told), ``hot_rewirings`` (leads or relays moved
with something on), ``tracebacks`` (an error that is none of the suite's own), ``hangs``.
``sound_passed`` of ``sound`` boards without a fault show that not everything simply fails.
"""

from __future__ import annotations

import argparse
import json
import multiprocessing
import sys
import tempfile
import time
from collections import Counter, defaultdict
from collections.abc import Callable, Iterator, Sequence
from dataclasses import asdict
from functools import partial
from pathlib import Path

from tests.campaigns.faults_draw import CHUNK, draw_trial
from tests.campaigns.faults_shop import STAGES
from tests.campaigns.faults_trial import Outcome, durations, run_chunk

TRIALS = 5000
MUST_BE_0 = (
    "left_on_unreported", "false_off", "wrong_pass", "over_rating", "hot_rewirings", "tracebacks",
    "hangs",
)  # fmt: skip


def _say(line: str) -> None:
    print(line, flush=True)


def campaign(
    trials: int,
    seed: int,
    workers: int,
    folder: Path,
    stages: Sequence[str] = tuple(STAGES),
    say: Callable[[str], None] = _say,
) -> list[Outcome]:
    """Trials 0 to ``trials``, told as they come."""
    size = CHUNK if trials > CHUNK else -(-trials // workers)
    chunks = [range(n, min(n + size, trials)) for n in range(0, trials, size)]
    found: list[Outcome] = []
    work = partial(run_chunk, seed, folder, durations(folder, stages))
    began = time.monotonic()
    with multiprocessing.get_context("spawn").Pool(workers, maxtasksperchild=20) as pool:
        for result in pool.imap_unordered(work, chunks):
            found += result
            for outcome in result:
                for line in lines_of(seed, outcome):
                    say(line)
            say(f"{len(found)} trials, {time.monotonic() - began:.0f} s")
    return found


def lines_of(seed: int, outcome: Outcome) -> Iterator[str]:
    """What was wrong; and a board without a fault that did not pass."""
    yield from (f"{key}: seed {seed}, {outcome.sentence()}: {text}" for key, text in outcome.wrong)
    if not outcome.families and outcome.verdict != "pass":
        yield f"sound, not passed: seed {seed}, {outcome.sentence()}"


def summed(outcomes: Sequence[Outcome]) -> dict[str, object]:
    """For the last line."""
    wrong = Counter(key for outcome in outcomes for key in {key for key, _ in outcome.wrong})
    sound = [outcome for outcome in outcomes if not outcome.families]
    slowest = max(outcomes, key=lambda outcome: outcome.worst_s)
    allowed = [outcome.allowed_s for outcome in outcomes if outcome.allowed_s]
    return {
        "trials": len(outcomes),
        **{key: wrong[key] for key in MUST_BE_0},
        "worst_reaction_s": round(slowest.worst_s, 3),
        "worst_reaction": f"trial {slowest.number}: {slowest.worst_of}",
        "least_allowed_s": round(min(allowed, default=0.0), 3),
        "sound": len(sound),
        "sound_passed": sum(outcome.verdict == "pass" for outcome in sound),
        "exit_codes": dict(sorted(Counter(str(o.exit_code) for o in outcomes).items())),
        "verdicts": dict(Counter(outcome.verdict for outcome in outcomes)),
        "told_on": sum(outcome.exit_code == 4 for outcome in outcomes),
        "told_on_and_was": sum(o.exit_code == 4 and o.on_at_end for o in outcomes),
        "falsified": sum(outcome.falsified for outcome in outcomes),
        "energised": sum(outcome.energised for outcome in outcomes),
    }


def table(outcomes: Sequence[Outcome]) -> Iterator[str]:
    """Counts by fault; a trial with two counts for both."""
    by_family: dict[str, list[Outcome]] = defaultdict(list)
    for outcome in outcomes:
        for family in outcome.families or ("none",):
            by_family[family].append(outcome)
    yield f"{'fault':<26}{'trials':>7}{'pass':>6}{'fail':>6}{'undec.':>7}{'exit 4':>7}  worst s"
    for family, own in sorted(by_family.items()):
        verdicts = Counter(outcome.verdict for outcome in own)
        yield (
            f"{family:<26}{len(own):>7}{verdicts['pass']:>6}{verdicts['fail']:>6}"
            f"{verdicts['undecided'] + verdicts['none']:>7}"
            f"{sum(outcome.exit_code == 4 for outcome in own):>7}"
            f"  {max(outcome.worst_s for outcome in own):.2f}"
        )


def main(arguments: Sequence[str] | None = None) -> int:
    """See the module."""
    parser = argparse.ArgumentParser(prog="python -m tests.campaigns.faults")
    parser.add_argument("--trials", type=int, default=TRIALS)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--workers", type=int, default=2)
    parser.add_argument("--only", type=int, help="this trial alone, and everything about it")
    parser.add_argument("--log", type=Path, help="where every outcome is written, a line each")
    parser.add_argument("--keep", type=Path, help="where the run folders of --only are left")
    options = parser.parse_args(arguments)
    began = time.monotonic()
    with tempfile.TemporaryDirectory() as name:
        folder = options.keep or Path(name)
        if options.only is not None:
            stage = draw_trial(options.seed, options.only).stage
            takes_s = dict.fromkeys(STAGES, 0.0) | durations(folder, [stage])
            (outcome,) = run_chunk(options.seed, folder, takes_s, [options.only], keep=True)
            print(outcome.sentence())
            for text in outcome.told():
                print(f"  {text}")
            outcomes = [outcome]
        else:
            outcomes = campaign(options.trials, options.seed, options.workers, folder)
    if options.log is not None:
        lines = [json.dumps(asdict(outcome)) for outcome in outcomes]
        options.log.write_text("\n".join([*lines, ""]), "utf-8")
    for line in table(outcomes):
        print(line)
    seconds = round(time.monotonic() - began, 1)
    found = {**summed(outcomes), "seed": options.seed, "seconds": seconds}
    print(json.dumps(found))
    return int(any(found[key] for key in MUST_BE_0))


if __name__ == "__main__":
    sys.exit(main())
