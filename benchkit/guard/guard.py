"""The guard: permissives before, a watch during, and off confirmed after.

Software is the second line of defence. The first is the supply's own over-voltage, over-current
and current limit, which the guard programs, reads back, and refuses to go on without. A process
that is killed outright leaves only those.

Nothing else in this suite can switch a supply on: the guard owns supply and load, and hands out a
``Live`` handle only inside ``energised``, which always ends in ``make_safe``.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager, nullcontext

from benchkit.errors import (
    LinkError,
    NotConfirmedOff,
    OperatorStopped,
    Refused,
    Tripped,
)
from benchkit.guard.envelope import Ceilings, Envelope
from benchkit.guard.live import Live
from benchkit.guard.off import doubts_of, say
from benchkit.guard.permissives import RESIDUAL_V, check_calibration, check_dead, check_sensors
from benchkit.guard.polarity import PROOF_A, PROOF_V, check_leads, proof
from benchkit.guard.trips import SUPPLY_TRIPPED, Trip, above, of_ports, of_supply, of_voltage
from benchkit.guard.watch import Watch
from benchkit.harness import DRAWING, Harness
from benchkit.protocols import (
    Clock,
    Journal,
    Load,
    Operator,
    Points,
    Protection,
    Supply,
    SupplyState,
    Wiring,
)
from benchkit.reading import Reading

PORTS = ("exposed_voltage", "guarded_voltage")
OFF_A = 0.01
"""More than this through the exposed port is not an output that is off."""
DISCHARGE_S = 5.0
"""How long the output is given to fall below RESIDUAL_V."""
LEVEL_SHARE, LEVEL_V, LEVEL_A = 0.02, 0.05, 0.01
"""How far a read-back of a protection level may be from what was asked."""
SLACK_S = 1.0
"""What arithmetic, disk and screen may take between two looks, beside the instruments."""


class Guard:
    """Owns what can hurt. One per bench."""

    def __init__(
        self,
        supply: Supply,
        load: Load,
        points: Points,
        clock: Clock,
        operator: Operator,
        journal: Journal,
        ceilings: Ceilings,
        calibration_due: Mapping[str, dt.date],
        today: dt.date,
        *,
        waits_s: float = 0.0,
        wiring: Wiring | None = None,
        shield: Callable[[], AbstractContextManager[None]] = nullcontext,
        watcher: Callable[[Reading], None] | None = None,
    ) -> None:
        self.__supply, self.__load = supply, load
        self._points, self._clock, self._operator = points, clock, operator
        self._journal = journal
        self.ceilings = ceilings
        self._due, self._today = calibration_due, today
        self._waits_s, self._shield, self._watcher = waits_s, shield, watcher
        self._start_s = clock.now()
        self._step = "start"
        self._case_C = math.nan
        self._watch = Watch(0.0)
        self._live: Live | None = None
        self._wiring, self._harness = wiring, DRAWING
        self._proved = self._maybe_crossed = False
        self._begun = False
        self._off = False
        self._found_on = ""
        self._unwritten: Exception | None = None

    # what anyone may do

    def now(self) -> float:
        """Seconds of bench time since the run began, to the microsecond."""
        return round(self._clock.now() - self._start_s, 6)

    def sleep(self, seconds: float) -> float:
        """Let bench time pass, looking all the while if something is energised; returns ``now()``
        after it."""
        return self._sleep(seconds) if self._live is None else self._live.wait(seconds)

    def _sleep(self, seconds: float) -> float:
        return round(self._clock.sleep(seconds) - self._start_s, 6)

    def begin(self, journal: Journal) -> None:
        """Begin a run: time 0, a new journal, and nothing remembered of the run before."""
        self._journal, self._start_s, self._step = journal, self._clock.now(), "start"
        self._case_C = math.nan
        self._proved, self._begun = False, True
        self._points.forget()
        if self._found_on:
            self._journal.event("found-on", self._found_on, time_s=self.now())
            self._found_on = ""

    def step(self, name: str) -> None:
        """Name what is being done; readings and events carry it."""
        self._step = name
        self._journal.event("step", name, time_s=self.now())

    def expect(self, point: str, largest: float) -> None:
        """Fix a point's range for what is to come."""
        self._points.expect(point, largest)

    def read(self, point: str, *, quick: bool = False) -> Reading:
        """One reading, recorded before it is returned; while something is energised, the guard
        looks first when a look is due."""
        return self._read(point, self._look_when_due(), quick=quick)

    def _look_when_due(self) -> float:
        now = self.now()
        if self._live is not None and not 0 <= now - self._live.looked_s <= self.ceilings.poll_s:
            self._live.look()
            now = self.now()
        return now

    def _read(self, point: str, time_s: float, *, quick: bool) -> Reading:
        reading = self._points.read(point, time_s, quick=quick)
        self._keep(reading)
        return reading

    def remark(self, kind: str, text: str) -> None:
        """Something the report is to mention."""
        self._journal.event(kind, text, time_s=self.now(), step=self._step)

    def latest_case_C(self) -> float:
        """The case temperature the guard saw last; nan before its first look."""
        return self._case_C

    def instruct(self, text: str) -> None:
        """Ask for something to be done by hand; OperatorStopped when it is declined, Refused
        while something is energised."""
        self._require_rest("nothing is asked of a person")
        self._journal.event("instruction", text, time_s=self.now())
        if not self._operator.instruct(text):
            raise OperatorStopped(f"the operator declined: {text}")

    def _require_rest(self, what: str) -> None:
        if self._live is not None:
            raise Refused(f"{what} while {self._live.envelope.name} is energised")

    # before

    def start_off(self) -> None:
        """See that nothing is on before a person reaches in: off, and confirmed, or
        NotConfirmedOff. An output found on is told by the next run."""
        self._found_on = self._switched_on()
        self.make_safe(self._found_on or "before anything is done")

    def _switched_on(self) -> str:
        """What the supply says when it was found on; empty when it is off."""
        state = self.__supply.state()
        if not state.output_on:
            return ""
        return (
            f"{self.__supply.role} was found switched on, at {state.voltage_V:.3g} V and "
            f"{state.current_A:.3g} A: switching it off"
        )

    def permit(self) -> None:
        """Check every permissive that needs no voltage. Refused names the one that is missing."""
        check_calibration(self._due, self._today)
        if found_on := self._switched_on():
            self._off = False
            self._journal.event("found-on", found_on, time_s=self.now())
            self.make_safe("found switched on")
        self.__load.release()
        check_dead(self._usable)
        check_sensors(self._usable)
        self._journal.event("permitted", "every permissive holds", time_s=self.now())

    def _usable(self, point: str) -> float:
        reading = self.read(point)
        if not reading.usable:
            raise Refused(f"{point} gives no usable reading ({reading.status}): check its leads")
        return reading.value

    @property
    def begun(self) -> bool:
        """Whether a run was begun, so that a board may be in the fixture."""
        return self._begun

    @property
    def harness(self) -> Harness:
        """How the leads are, as far as anyone has done it; ``prove_polarity`` shows it."""
        return self._harness

    @property
    def maybe_crossed(self) -> bool:
        """Whether leads were to be crossed, and not proved right way round since."""
        return self._maybe_crossed

    def arrange(self, harness: Harness) -> None:
        """Have the leads connected otherwise: never hot, and unproved until ``prove_polarity``.

        Refused while something is energised, not confirmed off, or while a port still holds more
        than RESIDUAL_V.
        """
        self._require_rest("no lead is touched")
        if not self._off:
            raise Refused("no lead is touched before the outputs are confirmed off")
        if self._wiring is None:
            raise Refused("this bench cannot be wired otherwise")
        if found_on := self._switched_on():
            self.make_safe(found_on)
            raise Refused(f"{found_on}; no lead is touched before it is known why")
        self.clear_for_hands()
        check_dead(self._usable)
        self._proved, self._maybe_crossed = False, self._maybe_crossed or harness.crossed
        self._journal.event("harness", harness.sentence(), time_s=self.now())
        self._wiring.arrange(harness)
        self._harness = harness

    def clear_for_hands(self) -> None:
        """Both ports dead, with time to discharge; Refused when they do not get so.

        Not recorded: it may belong to no run yet.
        """
        self._require_rest("no hand reaches in")

        def read(point: str) -> float:
            reading = self._points.read(point, self.now(), quick=True)
            return reading.value if reading.usable else math.inf

        began = self.now()
        while self.now() - began < DISCHARGE_S:
            if all(abs(read(point)) <= RESIDUAL_V for point in PORTS):
                break
            self._sleep(0.05)
        check_dead(read)

    def prove_polarity(self) -> bool:
        """At a volt and milliamperes, see which way round the leads are, and that the meters agree.

        Polarity is never taken from a relay or a person. Refused when it is not as the harness
        says. Returns whether the stage stood the volt; False where, with the leads crossed, it
        conducts all that the supply gives. Where the supply's over-current protection ended that,
        the current could not show its direction, and polarity stays unproved.
        """
        crossed, self._proved = self._harness.crossed, False
        envelope = proof(self.ceilings.case_max_C, crossed=crossed)
        self.step("polarity/reversed" if crossed else "polarity")
        blocks, proved = True, True
        try:
            with self.energised(envelope) as live:
                live.wait(0.05)
                # A stage that conducts makes the supply limit or trip only by now.
                live.look()
                limited = crossed and self.__supply.state().constant_current
                blocks = check_leads(self._usable, self._harness.sign, limited=limited)
        except Tripped as trip:
            if self._maybe_crossed and not crossed:
                raise Refused(f"{trip}: the leads may still be crossed") from trip
            if not crossed or SUPPLY_TRIPPED not in str(trip):
                raise
            blocks = proved = False
        self._proved = proved
        self._maybe_crossed = self._maybe_crossed and not (proved and not crossed)
        self._journal.event(
            "polarity",
            "as it should be, proved by measurement" if proved else "not proved: it conducts",
            time_s=self.now(),
            blocks=blocks,
        )
        return blocks

    # during

    @contextmanager
    def energised(self, envelope: Envelope, caution: str | None = None) -> Iterator[Live]:
        """Protect, program, switch on; hand out the means to load and wait; always end off.

        Whatever ends the block (its end, a trip, an error, Ctrl-C), the output is switched off
        first and then confirmed off; NotConfirmedOff replaces the error when it cannot be.
        """
        self._require_rest(f"{envelope.name} cannot begin")
        envelope.check(self.ceilings)
        harmless = envelope.voltage_V <= PROOF_V and envelope.current_limit_A <= PROOF_A
        if not self._proved and not harmless:
            raise Refused(
                f"{envelope.name} cannot begin: which way round the leads are has not been proved"
            )
        if caution is not None:
            caution += (
                f" The guard looks every {self.ceilings.poll_s:g} s; when instruments fail it may "
                f"be blind for up to {self.blind_s:.0f} s, with only the supply's own limits left."
            )
            self._journal.event("caution", caution, time_s=self.now())
            if not self._operator.acknowledge(caution):
                raise OperatorStopped("the operator did not accept the caution")
        try:
            self._off = False
            self.__load.release()
            # Zero volts first: a supply may refuse a protection level below its set voltage, and a
            # voltage above its protection level, so neither may be in the other's way. The current
            # limit before the levels: on supplies whose over-current level is their current limit,
            # the level read back is that of the limit then in force.
            self.__supply.program(0.0, envelope.current_limit_A)
            self._protect(envelope)
            self.__supply.program(envelope.voltage_V, envelope.current_limit_A)
            self._journal.event(
                "on",
                f"{envelope.name}: {envelope.sentence()}",
                time_s=self.now(),
                blind_s=self.blind_s,
            )
            self._watch = Watch(self.blind_s)
            live = self._live = Live(self, self.__load, envelope)
            self.__supply.enable()
            yield live
        except BaseException as error:
            self.make_safe(say(error), error)
            raise
        try:
            self.make_safe(f"end of {envelope.name}")
        except BaseException as error:
            # A signal that came just before the shield: nothing was switched off yet.
            if self._live is not None:
                self.make_safe(say(error), error)
            raise

    @property
    def blind_s(self) -> float:
        """The longest from one look to the end of the next, or to output-off being sent: the
        polling interval, what the instruments may take meanwhile, and SLACK_S.

        Not bounded is a machine that stands still (suspended, its disk hanging).
        """
        return self.ceilings.poll_s + self._waits_s + SLACK_S

    def _protect(self, envelope: Envelope) -> None:
        asked = Protection(envelope.over_voltage_V, envelope.over_current_A)
        read = self.__supply.protect(asked)
        for what, want, got, slack in (
            ("over-voltage", asked.over_voltage_V, read.over_voltage_V, LEVEL_V),
            ("over-current", asked.over_current_A, read.over_current_A, LEVEL_A),
        ):
            if not abs(got - want) <= LEVEL_SHARE * want + slack:
                raise Refused(
                    f"{self.__supply.role}: its {what} level reads back as {got:.4g} after "
                    f"{want:.4g} was set; nothing is switched on without it"
                )

    def _keep(self, reading: Reading) -> None:
        self._journal.reading(self._step, reading)
        if reading.point == "case":
            self._case_C = reading.value
        if self._watcher is not None:
            self._watcher(reading)

    def look(self, envelope: Envelope, began_s: float) -> float:
        """One look at everything that trips; Tripped says threshold, reading and time.

        Returns the time of the look, which stamps all that was read in it.
        """
        state = self.__supply.state()
        now = self.now()
        self._keep(Reading(now, "supply_voltage", state.voltage_V, "V", 0.0, 0.0))
        self._keep(Reading(now, "supply_current", state.current_A, "A", 0.0, 0.0))
        self._trip_on(of_supply(envelope, state), now)
        case = self._read("case", now, quick=True)
        if not case.usable:
            self._trip("case", f"gives no usable reading ({case.status})", now)
        self._trip_on(above("case", case.value, envelope.case_max_C, "C"), now)
        self._trip_on(self._watch.trips(envelope, state, case.value, now), now)
        if envelope.voltage_V > PROOF_V:
            self._look_at_a_voltage(envelope, state, now)
        self._trip_on(above("time", now - began_s, envelope.longest_s, "s"), now)
        return now

    def _look_at_a_voltage(self, envelope: Envelope, state: SupplyState, now: float) -> None:
        """By turns the guarded port's sign, and the supply's own voltage against the meter's."""
        point = self._watch.voltage_due(now, self.ceilings.poll_s)
        if point is None:
            return
        reading = self._read(point, now, quick=True)
        if not reading.usable:
            self._trip(point, f"gives no usable reading ({reading.status})", now)
        self._trip_on(of_voltage(envelope, state, reading, self._harness.sign), now)

    def check_ports(
        self, envelope: Envelope, exposed_V: float, guarded_V: float, drop_V: float
    ) -> None:
        """Trip on the guarded side's sign, and where the three meter channels contradict."""
        self._trip_on(of_ports(envelope, exposed_V, guarded_V, drop_V), self.now())

    def check_loss(self, envelope: Envelope, drop_V: float, current_A: float) -> None:
        """Trip on the stage's own loss."""
        loss = drop_V * current_A
        if not loss <= envelope.loss_max_W:
            self._trip_on(above("loss", loss, envelope.loss_max_W, "W"), self.now())

    def _trip_on(self, found: Iterable[Trip], now: float) -> None:
        """Trip on the first of what was found, if anything was."""
        for what, text in found:
            self._trip(what, text, now)

    def _trip(self, what: str, text: str, now: float) -> None:
        self._journal.event("trip", f"{what} {text}", time_s=now, step=self._step)
        raise Tripped(f"{what} {text} at {now:.3f} s, in step {self._step}")

    # after

    @property
    def confirmed_off(self) -> bool:
        """Whether off was confirmed, and nothing was begun or found on since."""
        return self._off

    def make_safe(self, why: str, error: BaseException | None = None) -> None:
        """Output off first, then confirmed by read-back and by a meter; NotConfirmedOff if not.

        Called on every way out; harmless when everything is off already. ``error`` is what ended
        a step, for the journal. Whatever fails in here, a full disk too, the rest is done all the
        same; what could not be written is raised at the end.
        """
        with self._shield():
            self._off, self._live = False, None
            doubts = [
                *doubts_of(f"{self.__supply.role}'s read-back", self.__supply.disable),
                *doubts_of("the meter", self._discharged),
            ]
            for doubt in doubts_of("could not be released", self.__load.release):
                self._note("load", doubt)
            if error is not None:
                self._note("stopped", say(error), error=type(error).__name__)
            if doubts:
                self._note("not-confirmed-off", "; ".join(doubts))
                raise NotConfirmedOff(
                    "OUTPUTS NOT CONFIRMED OFF. Make the bench safe by hand: switch the supply "
                    "off at its own switch, then disconnect the exposed port, then measure it "
                    f"with a separate meter. Not confirmed by {' and by '.join(doubts)} "
                    f"(after: {why})"
                )
            self._off = True
            self._note("off", f"confirmed off: {why}")
            unwritten, self._unwritten = self._unwritten, None
            if unwritten is not None:
                raise unwritten

    def _note(self, kind: str, text: str, **facts: object) -> None:
        """Write down what switching off found; a journal that fails must not break it off."""
        try:
            self._journal.event(kind, text, time_s=self._then(), **facts)
        except Exception as fault:  # noqa: BLE001  see above
            self._unwritten = fault

    def _then(self) -> float | None:
        """The time, where the clock can still be asked."""
        try:
            return self.now()
        except LinkError:
            return None

    def _discharged(self) -> str | None:
        """Wait for the exposed port to fall below RESIDUAL_V and carry nothing; a sentence when it
        does not. A stage that conducts holds the port low: then the current tells."""
        self._points.recover("exposed_voltage")
        began = self._clock.now()
        while True:
            volts = self._read_off("exposed_voltage")
            low = volts.usable and abs(volts.value) < RESIDUAL_V
            amps = self._read_off("exposed_current") if low else None
            # An overload is no small current: what gives no usable reading confirms nothing.
            if amps is not None and amps.usable and abs(amps.value) <= max(OFF_A, 3 * amps.u):
                return None
            if self._clock.now() - began > DISCHARGE_S:
                reading = amps or volts
                value = f"{reading.value:.3g} {reading.unit}" if reading.usable else reading.status
                return f"{reading.point} is still {value} {DISCHARGE_S:g} s after switching off"
            self._clock.sleep(0.02)

    def _read_off(self, point: str) -> Reading:
        """Recorded under a step of its own: it is no measurement of what was being done."""
        reading = self._points.read(point, self.now(), quick=True)
        try:
            self._journal.reading("off", reading)
        except Exception as fault:  # noqa: BLE001  as in _note
            self._unwritten = fault
        return reading
