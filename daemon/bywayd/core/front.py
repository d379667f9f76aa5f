"""
The front: every decision of the daemon behind one method.

`Front(settings, epoch, seed).handle(event, now) -> effects`.
"""

from __future__ import annotations

from bywayd.core.effects import Effect
from bywayd.core.events import Event
from bywayd.core.front_settings import FrontSettings
from bywayd.core.instants import Instant

__all__ = ["Front", "FrontSettings"]


class Front:
    """
    Owns docket, ledger, roster and health; one caller, one thread.

    Args:
        settings: fixed for its life.
        epoch: names this life of the daemon; different from all before.
        seed: where the seeds of replans come from that bring none; same seed, same events at the
            same instants, same effects.
    """

    def __init__(self, settings: FrontSettings, epoch: str, seed: int) -> None:
        self.settings = settings
        self.epoch = epoch
        self._seed = seed

    def handle(self, event: Event, now: Instant) -> list[Effect]:
        """Take in one event and return what is to be done about it, in order."""
        raise NotImplementedError
