"""What a person sees while something is going on: standard error, so that results stay clean."""

from __future__ import annotations

import time
from collections.abc import Iterator
from contextlib import contextmanager

from rich.console import Console
from rich.progress import BarColumn, Progress, TaskID, TextColumn

from benchkit.reading import Reading

LABELS = {"drop": "drop", "exposed_current": "current", "case": "case"}
REFRESH_S = 0.1


class Screen:
    """Progress bars with live readings; ``quiet`` shows cautions and errors only."""

    def __init__(self, *, quiet: bool = False) -> None:
        self.console = Console(stderr=True, highlight=False, soft_wrap=True)
        self.quiet = quiet
        self._latest: dict[str, str] = {}
        self._progress: Progress | None = None
        self._task: TaskID | None = None
        self._shown_s = 0.0

    def say(self, text: str) -> None:
        """A line for the person at the bench."""
        if not self.quiet:
            self.console.print(text, markup=False)

    def caution(self, text: str) -> None:
        """A caution: always shown."""
        self.console.print(f"CAUTION  {text}", style="bold", markup=False)

    @contextmanager
    def still(self) -> Iterator[None]:
        """No bar while a question stands on the screen: it would be drawn over the answer."""
        bar = self._progress
        if bar is None:
            yield
            return
        bar.stop()
        try:
            yield
        finally:
            bar.start()

    @contextmanager
    def progress(self, label: str, total: float) -> Iterator[None]:
        """A bar around something that takes its time; see ``advance``."""
        if self.quiet or self._progress is not None or not self.console.is_terminal:
            yield
            return
        columns = (
            TextColumn("{task.description:<16}", markup=False),
            BarColumn(bar_width=24),
            TextColumn("{task.percentage:>3.0f} %"),
            TextColumn("{task.fields[readings]}", markup=False),
        )
        with Progress(*columns, console=self.console, transient=True) as bar:
            self._progress, self._task = bar, bar.add_task(label, total=total, readings="")
            try:
                yield
            finally:
                self._progress = self._task = None

    def advance(self, done: float, label: str | None = None) -> None:
        """Move the bar to ``done`` of its total."""
        if self._progress is not None and self._task is not None:
            if label is None:
                self._progress.update(self._task, completed=done)
            else:
                self._progress.update(self._task, completed=done, description=label)

    def reading(self, reading: Reading) -> None:
        """Show a live reading beside the bar."""
        if self._progress is None or self._task is None or reading.point not in LABELS:
            return
        value = _short(reading.value, reading.unit) if reading.usable else reading.status
        self._latest[reading.point] = f"{LABELS[reading.point]} {value}"
        now = time.monotonic()
        if now - self._shown_s > REFRESH_S:
            self._shown_s = now
            text = "  ".join(self._latest[p] for p in LABELS if p in self._latest)
            self._progress.update(self._task, readings=text)


def _short(value: float, unit: str) -> str:
    if unit == "V" and abs(value) < 1:
        return f"{1e3 * value:.2f} mV"
    return f"{value:.1f} °C" if unit == "C" else f"{value:.3f} {unit}"
