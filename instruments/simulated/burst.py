"""The trigger system of the simulated meters: a burst of readings at a fixed pace."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field

from instruments.simulated.core import Core
from instruments.simulated.errors import ScpiError
from instruments.simulated.parameters import Choice, Limit, Number
from instruments.simulated.tree import Entry

MEMORY = 100_000
"""Most readings of one burst."""
SHORTEST_S, LONGEST_S, DEFAULT_S = 1e-4, 100.0, 1.0
TIMER_DIGITS = 6
"""The timer counts microseconds."""
NEAR_S = 1e-9


@dataclass(slots=True)
class _Run:
    """One burst, begun at ``start_s``."""

    start_s: float
    channels: tuple[int | None, ...]
    scans: int
    interval_s: float
    step_s: float
    apertures_s: tuple[float, ...]
    taken: list[str] = field(default_factory=list)

    def due_s(self) -> float | None:
        """When the middle of the next aperture is."""
        scan, place = divmod(len(self.taken), len(self.channels))
        if scan == self.scans:
            return None
        opens_s = self.start_s + scan * self.interval_s + place * self.step_s
        return opens_s + self.apertures_s[place] / 2

    @property
    def end_s(self) -> float:
        """When the last aperture closes."""
        last = len(self.channels) - 1
        whole = (self.scans - 1) * self.interval_s + last * self.step_s
        return self.start_s + whole + self.apertures_s[last]


class Burst:
    """INITiate returns at once; readings are then taken as bench time passes, FETCh? waits.

    The aperture of scan k and the j-th channel opens k intervals and j steps after INITiate; its
    reading is the value in its middle. A scan that takes longer than the interval is refused.
    """

    def __init__(
        self,
        core: Core,
        channels: Sequence[int | None],
        least_step_s: float,
        routing_s: float,
        aperture_s: Callable[[int | None], float],
        reading: Callable[[int | None], str],
    ) -> None:
        """``reading`` gives the response for a channel as it is now and lets no time pass; steps
        are ``routing_s`` and the aperture, and never less than ``least_step_s``."""
        self._core = core
        self._channels = tuple(channels)
        self._least_step_s = least_step_s
        self._routing_s = routing_s
        self._aperture_s = aperture_s
        self._reading = reading
        self.preset()
        core.samplers.append(self)

    def preset(self) -> None:
        """As CONFigure leaves it: one scan, at once; readings are lost."""
        self._timed = False
        self._interval_s = DEFAULT_S
        self._scans = 1
        self._run: _Run | None = None

    def abort(self) -> None:
        """End what is under way; its readings are lost, a whole burst's are kept."""
        if self.due_s() is not None:
            self._run = None

    def due_s(self) -> float | None:
        """See ``Sampler``."""
        return None if self._run is None else self._run.due_s()

    def sample(self) -> None:
        """See ``Sampler``."""
        run = self._run
        if run is not None:
            channel = run.channels[len(run.taken) % len(run.channels)]
            run.taken.append(self._reading(channel))

    def entries(self, node: str) -> list[Entry]:
        """The commands; source, timer and count are below ``node``."""
        timer = SHORTEST_S, LONGEST_S, DEFAULT_S
        count = 1.0, float(MEMORY), 1.0

        def interval(limit: float | None) -> str:
            return f"{self._interval_s if limit is None else limit:.{TIMER_DIGITS}f}"

        def scans(limit: float | None) -> str:
            return str(self._scans if limit is None else round(limit))

        return [
            Entry(f"{node}:SOURce", self._set_source, (Choice(("IMMediate", "TIMer")),)),
            Entry(f"{node}:SOURce?", lambda: "TIM" if self._timed else "IMM"),
            Entry(f"{node}:TIMer", self._set_interval, (Number(*timer, unit="S"),)),
            Entry(f"{node}:TIMer?", interval, (Limit(*timer),)),
            Entry(f"{node}:COUNt", self._set_scans, (Number(*count),)),
            Entry(f"{node}:COUNt?", scans, (Limit(*count),)),
            Entry("INITiate[:IMMediate][:ALL]", self._initiate),
            Entry("FETCh?", self._fetch),
            Entry("ABORt", self.abort),
        ]

    def list_channels(self, channels: Sequence[int]) -> None:
        """ROUTe:SCAN."""
        self._refuse_while_running()
        self._channels = tuple(channels)

    def _set_source(self, source: str) -> None:
        self._refuse_while_running()
        self._timed = source == "TIM"

    def _set_interval(self, seconds: float) -> None:
        self._refuse_while_running()
        self._interval_s = round(seconds, TIMER_DIGITS)

    def _set_scans(self, scans: float) -> None:
        self._refuse_while_running()
        self._scans = round(scans)

    def _refuse_while_running(self) -> None:
        if self.due_s() is not None:
            raise ScpiError(-221, "a burst is under way")

    def _initiate(self) -> None:
        self._refuse_while_running()
        channels = self._channels
        if not channels:
            raise ScpiError(-221, "there is no scan list")
        if len(channels) * self._scans > MEMORY:
            raise ScpiError(-221, f"there is room for {MEMORY} readings only")
        apertures = tuple(self._aperture_s(channel) for channel in channels)
        step = max(self._least_step_s, self._routing_s + max(apertures))
        whole = len(channels) * step
        interval = self._interval_s if self._timed else whole
        if interval < whole - NEAR_S:
            raise ScpiError(-221, f"a scan takes {whole:g} s, more than the timer's {interval:g} s")
        now = self._core.world.now()
        self._run = _Run(now, channels, self._scans, interval, step, apertures)
        self._core.attend(self)

    def _fetch(self) -> str:
        run = self._run
        if run is None:
            raise ScpiError(-200, "there are no readings to fetch")
        self._core.elapse(max(0.0, run.end_s - self._core.world.now()))
        if self._run is not run:
            raise ScpiError(-200, "the burst was ended before its time")
        while run.due_s() is not None:  # the clock was ended: nobody waits any more
            self.sample()
        return ",".join(run.taken)
