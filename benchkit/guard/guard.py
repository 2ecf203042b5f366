"""The guard: permissives before, a watch during, and off confirmed after.

Software is the second line of defence. The first is the supply's own over-voltage, over-current
and current limit, which the guard programs, reads back, and refuses to go on without. A process
that is killed outright leaves only those.

Nothing else in this suite can switch a supply on: the guard owns every source and the load, and
hands out a ``Live`` handle only inside ``energised``, which always ends in ``make_safe``.
"""

from __future__ import annotations

import datetime as dt
import math
from collections.abc import Callable, Iterable, Iterator, Mapping
from contextlib import AbstractContextManager, contextmanager, nullcontext

from benchkit.errors import LinkError, NotConfirmedOff, OperatorStopped, Refused, Tripped
from benchkit.guard.envelope import Ceilings, Envelope
from benchkit.guard.leads import Leads
from benchkit.guard.live import Live
from benchkit.guard.looking import Looking
from benchkit.guard.off import discharged, doubts_of, say
from benchkit.guard.outputs import Outputs
from benchkit.guard.permissives import (
    DEAD_POINTS,
    check_calibration,
    check_dead,
    check_loop,
    check_sensors,
)
from benchkit.guard.trips import Trip, above, of_ports
from benchkit.guard.watch import Watch
from benchkit.harness import Harness, Source
from benchkit.prediction.coordination import Coordination
from benchkit.protocols import Clock, Interlock, Journal, Load, Operator, Points, Supply, Wiring
from benchkit.reading import Reading

SLACK_S = 1.0
"""What arithmetic, disk and screen may take between two looks, beside the instruments."""


class Guard:
    """Owns what can hurt. One per bench."""

    def __init__(
        self,
        supplies: Mapping[Source, Supply],
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
        interlock: Interlock | None = None,
        shield: Callable[[], AbstractContextManager[None]] = nullcontext,
        watcher: Callable[[Reading], None] | None = None,
    ) -> None:
        self.__outputs = Outputs(supplies, load)
        self._points, self._clock, self._operator = points, clock, operator
        self._journal = journal
        self.ceilings = ceilings
        self._due, self._today = calibration_due, today
        self._waits_s, self._shield, self._watcher = waits_s, shield, watcher
        self._start_s = clock.now()
        self._step = "start"
        self._case_C = math.nan
        self._live: Live | None = None
        self._interlock = interlock
        self._leads = Leads(self, self.__outputs, wiring)
        self._accepted: set[str] = set()
        self._begun = False
        self._off = False
        self._found_on = ""
        self._unsafe = self._placed = False
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
        self._leads.begin()
        self._begun = True
        self._accepted.clear()
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

    def can_read(self, point: str) -> bool:
        """Whether this bench has it."""
        return point in self._points.names()

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

    def remark(self, kind: str, text: str, **facts: object) -> None:
        """Something the report is to mention."""
        self._journal.event(kind, text, time_s=self.now(), step=self._step, **facts)

    def latest_case_C(self) -> float:
        """The case temperature the guard saw last; nan before its first look."""
        return self._case_C

    def _require_rest(self, what: str) -> None:
        if self._live is not None:
            raise Refused(f"{what} while {self._live.envelope.name} is energised")

    # before

    def start_off(self) -> None:
        """See that nothing is on before a person reaches in: off, and confirmed, or
        NotConfirmedOff. An output found on is told by the next run."""
        self._found_on = self.__outputs.found_on()
        self.make_safe(self._found_on or "before anything is done")

    def permit(self) -> None:
        """Check every permissive that needs no voltage. Refused names the one that is missing."""
        check_calibration(self._due, self._today)
        check_loop(self._interlock)
        if found_on := self.__outputs.found_on():
            self._off = False
            self._journal.event("found-on", found_on, time_s=self.now())
            self.make_safe("found switched on")
        self.__outputs.load.release()
        check_dead(self._usable, self.ceilings.thresholds)
        check_sensors(self._usable, self.ceilings.thresholds)
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
        return self._leads.harness

    @property
    def maybe_crossed(self) -> bool:
        """Whether leads were to be crossed, and not proved right way round since."""
        return self._leads.maybe_crossed

    def placed(self, harness: Harness) -> None:
        """A board was put in, connected so; unproved until ``prove_polarity``."""
        self._require_rest("no board is put in")
        self._leads.placed(harness)
        self._placed = True

    def arrange(self, harness: Harness) -> None:
        """Have the leads connected otherwise: never hot, and unproved until ``prove_polarity``.

        Refused while something is energised, not confirmed off, or while a port still holds more
        than the residual voltage.
        """
        self._clear("no lead is touched")
        self._accepted.clear()
        self._leads.arrange(harness)

    def refit_fuse(self, name: str) -> None:
        """Have a new fuse put in for ``name``; never hot, and unproved until ``prove_polarity``."""
        self._clear("no fuse is touched")
        self._accepted.clear()
        self._leads.refit_fuse(name)

    def _clear(self, what: str) -> None:
        """See that it is safe for hands and relays; Refused says ``what`` is not done."""
        self._require_rest(what)
        if not self._off:
            raise Refused(f"{what} before the outputs are confirmed off")
        if found_on := self.__outputs.found_on():
            self.make_safe(found_on)
            raise Refused(f"{found_on}; {what} before it is known why")
        self.clear_for_hands()
        check_dead(self._usable, self.ceilings.thresholds)

    def clear_for_hands(self) -> None:
        """Both ports dead, with time to discharge; Refused when they do not get so.

        Not recorded: it may belong to no run yet.
        """
        self._require_rest("no hand reaches in")
        thresholds = self.ceilings.thresholds

        def read(point: str) -> float:
            reading = self._points.read(point, self.now(), quick=True)
            return reading.value if reading.usable else math.inf

        began = self.now()
        while self.now() - began < thresholds.discharge_s:
            if all(abs(read(point)) <= thresholds.residual_V for point in DEAD_POINTS):
                break
            self._sleep(0.05)
        check_dead(read, thresholds)

    def prove_polarity(self, caution: str | None = None) -> bool:
        """At a volt and milliamperes, see which way round the leads are, and that the meters agree.

        Polarity is never taken from a relay or a person. Refused when it is not as the harness
        says. Returns whether the stage stood the volt at its exposed port; False where, with the
        leads crossed, it conducts all that the source gives. Where a supply's over-current
        protection ended that, the current could not show its direction, and polarity stays
        unproved.
        """
        return self._leads.prove(caution)

    def declare_fuse(self, coordination: Coordination) -> None:
        """Say what the stage's fuse does at full current; a step that needs it is refused where it
        is not coordinated. Forgotten with the next run, and with a new fuse."""
        told = "; ".join(coordination.notes) or "the fuse is coordinated"
        self._journal.event("fuse", told, time_s=self.now(), **coordination.document())
        self._leads.fuse = coordination

    # during

    @contextmanager
    def energised(self, envelope: Envelope, caution: str | None = None) -> Iterator[Live]:
        """Protect, program, switch on; hand out the means to load and wait; always end off.

        Whatever ends the block (its end, a trip, an error, Ctrl-C), every output is switched off
        first and then confirmed off; NotConfirmedOff replaces the error when it cannot be.
        A caution is asked once a run, and again after leads were moved.
        """
        self._require_rest(f"{envelope.name} cannot begin")
        envelope.check(self.ceilings)
        if self._unsafe:
            raise Refused(f"{envelope.name} cannot begin: outputs are not confirmed off")
        if caution is not None and caution not in self._accepted:
            self._ask(caution)
        self._permit_step(envelope)
        try:
            self._off = False
            if found_on := self.__outputs.found_on():
                raise Refused(f"{envelope.name} cannot begin: {found_on}")
            self.__outputs.prepare(envelope)
            self._journal.event(
                "on",
                f"{envelope.name}: {envelope.sentence()}",
                time_s=self.now(),
                blind_s=self.blind_s,
            )
            live = self._live = self._followed(envelope)
            check_loop(self._interlock)
            drive = envelope.drives()[envelope.source]
            self.__outputs.enable(envelope.source, drive, self.now())
            yield live
        except BaseException as error:
            try:
                self.make_safe(say(error), error)
            except BaseException as later:
                self._once_more(later)
                raise
            raise
        try:
            self.make_safe(f"end of {envelope.name}")
        except BaseException as error:
            self._once_more(error)
            raise

    def _once_more(self, error: BaseException) -> None:
        """After a signal that came just before the shield: nothing was switched off yet, or not
        all of it."""
        if not (self._off or isinstance(error, NotConfirmedOff)):
            self.make_safe(say(error), error)

    def _permit_step(self, envelope: Envelope) -> None:
        """What must hold before this step, whatever was checked before."""
        check_loop(self._interlock)
        self._leads.permit(envelope)

    def _ask(self, caution: str) -> None:
        told = (
            f"{caution} The guard looks every {self.ceilings.poll_s:g} s; when instruments fail it "
            f"may be blind for up to {self.blind_s:.0f} s, with only the supply's own limits left."
        )
        self._journal.event("caution", told, time_s=self.now())
        if not self._operator.acknowledge(told):
            raise OperatorStopped("the operator did not accept the caution")
        self._accepted.add(caution)

    def _followed(self, envelope: Envelope) -> Live:
        """The handle of a step that is about to be switched on; a burst begins here."""
        thresholds = self.ceilings.thresholds
        looking = Looking(
            self.__outputs, self._interlock, envelope, self.harness,
            Watch(self.blind_s, thresholds), thresholds,
            read=lambda point, at: self._read(point, at, quick=True),
            keep=self._keep, trip_on=self._trip_on,
        )  # fmt: skip
        live = Live(self, self.__outputs, looking, envelope)
        if envelope.burst is not None:
            self._points.arm_burst(envelope.burst.points, envelope.burst.seconds)
            live.burst_began_s = self.now()
        return live

    def take_burst(self, began_s: float) -> list[Reading]:
        """Everything a burst read, recorded; for ``Live.burst``."""
        readings = self._points.fetch_burst(began_s)
        for reading in readings:
            self._keep(reading)
        return readings

    @property
    def blind_s(self) -> float:
        """The longest from one look to the end of the next, or to output-off being sent: the
        polling interval, what the instruments may take meanwhile, and SLACK_S.

        Not bounded is a machine that stands still (suspended, its disk hanging).
        """
        return self.ceilings.poll_s + self._waits_s + SLACK_S

    def _keep(self, reading: Reading) -> None:
        self._journal.reading(self._step, reading)
        if reading.point == "case":
            self._case_C = reading.value
        if self._watcher is not None:
            self._watcher(reading)

    def check_ports(
        self, envelope: Envelope, exposed_V: float, guarded_V: float, drop_V: float
    ) -> None:
        """Trip on the guarded side's sign, and where the three meter channels contradict."""
        found = of_ports(envelope, exposed_V, guarded_V, drop_V, self.ceilings.thresholds)
        self._trip_on(found, self.now())

    def check_loss(self, envelope: Envelope, drop_V: float, current_A: float) -> None:
        """Trip on the stage's own loss."""
        loss = abs(drop_V * current_A)
        if not loss <= envelope.loss_max_W:
            self._trip_on(above("loss", loss, envelope.loss_max_W, "W"), self.now())

    def _trip_on(self, found: Iterable[Trip], now: float) -> None:
        """Trip on the first of what was found, if anything was."""
        for what, text in found:
            self._journal.event("trip", f"{what} {text}", time_s=now, step=self._step)
            raise Tripped(f"{what} {text} at {now:.3f} s, in step {self._step}")

    # after

    @property
    def confirmed_off(self) -> bool:
        """Whether off was confirmed, and nothing was begun or found on since."""
        return self._off

    def make_safe(self, why: str, error: BaseException | None = None) -> None:
        """Outputs off first, then confirmed by read-back and by a meter; NotConfirmedOff if not.

        Called on every way out; harmless when everything is off already. ``error`` is what ended
        a step, for the journal. Whatever fails in here, a full disk too, the rest is done all the
        same; what could not be written is raised at the end.
        """
        with self._shield():
            self._off, self._live = False, None
            doubts = [
                *self.__outputs.all_off(),
                *doubts_of("the meter", self._discharged),
            ]
            for doubt in doubts_of("could not be released", self.__outputs.load.release):
                self._note("load", doubt)
            if error is not None:
                self._note("stopped", say(error), error=type(error).__name__)
            self._unsafe = bool(doubts)
            if doubts:
                self._note("not-confirmed-off", "; ".join(doubts))
                raise NotConfirmedOff(
                    "OUTPUTS NOT CONFIRMED OFF. Make the bench safe by hand: switch every supply "
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
        """The ports where a source may be, by the meter; a sentence when they do not get dead."""
        # Before a board was put in nobody has said where the sources are.
        at_guarded = not self._placed or any(
            port == "guarded" for _, port in self.harness.sources()
        )
        ports = ["exposed_voltage", *(["guarded_voltage"] if at_guarded else [])]
        for point in (*ports, "exposed_current"):
            self._points.recover(point)
        return discharged(self._read_off, self._clock, ports, self.ceilings.thresholds)

    def _read_off(self, point: str) -> Reading:
        """Recorded under a step of its own: it is no measurement of what was being done."""
        reading = self._points.read(point, self.now(), quick=True)
        try:
            self._journal.reading("off", reading)
        except Exception as fault:  # noqa: BLE001  as in _note
            self._unwritten = fault
        return reading
