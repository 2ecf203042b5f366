"""The only way to switch anything on, and the certainty that it is off again."""

from benchkit.guard.envelope import Burst, Ceilings, Drive, Envelope
from benchkit.guard.guard import Guard
from benchkit.guard.live import Live

__all__ = ["Burst", "Ceilings", "Drive", "Envelope", "Guard", "Live"]
