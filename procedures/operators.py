"""The person at the bench, and the one of the simulated bench."""

from __future__ import annotations

import sys

from benchkit.errors import InputError
from procedures.screen import Screen


def check_somebody_is_there() -> None:
    """InputError when standard input is no terminal: nobody can answer there."""
    if not sys.stdin.isatty():
        raise InputError(
            "standard input: this bench needs a person at a terminal, to read the cautions and "
            "put boards in; run the command in one"
        )


class ConsoleOperator:
    """Asks at the terminal; a closed terminal declines."""

    def __init__(self, screen: Screen) -> None:
        self._screen = screen

    def acknowledge(self, caution: str) -> bool:
        """Show the caution and wait for it to be accepted."""
        self._screen.caution(caution)
        return self._ask("Type yes to go on, anything else to stop: ").strip().lower() == "yes"

    def instruct(self, text: str) -> bool:
        """Ask for something to be done, and wait for the answer."""
        self._screen.console.print(f"TO DO  {text}", style="bold", markup=False)
        answer = self._ask("Enter when it is done, anything else to stop: ")
        return answer.strip().lower() in ("", "yes", "done")

    def _ask(self, prompt: str) -> str:
        with self._screen.still():
            self._screen.console.print(prompt, end="", markup=False)
            try:
                return input()
            except EOFError:
                return "stop"


class UnattendedOperator:
    """Nobody: who gave --unattended accepted the cautions of the plan; nothing can be asked."""

    def acknowledge(self, caution: str) -> bool:
        """Accepted beforehand; the caution is in the record."""
        del caution
        return True

    def instruct(self, text: str) -> bool:
        """Nobody does it."""
        del text
        return False


class SimulatedOperator:
    """Nobody can be hurt on the simulated bench: cautions are recorded, and shown once."""

    def __init__(self, screen: Screen) -> None:
        self._screen = screen
        self._shown = False

    def acknowledge(self, caution: str) -> bool:
        """Accept; the first caution of a run is shown as an example."""
        if not self._shown:
            self._screen.say(f"simulated bench; on a real one: {caution}")
            self._shown = True
        return True

    def instruct(self, text: str) -> bool:
        """Done."""
        del text
        return True
