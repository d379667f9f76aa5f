"""
How an event loop drives the sockets of a client.

Any number of tasks may be in calls of one client. Each takes its steps by itself; whoever takes
in messages may have those of others among them, so the others are woken then, and look.
"""

import asyncio
import contextlib
import math
from typing import Final

from byway.contact import Contact
from byway.link import Result, Steps, Waiting


class LoopDrive:
    """Takes steps in the tasks of an event loop."""

    def __init__(self, contact: Contact) -> None:
        self._contact: Final = contact
        #: What each task waits for.
        self._sleepers: dict[asyncio.Future[None], Waiting] = {}
        #: Descriptors that the loop watches now.
        self._watched: set[int] = set()
        # Sockets may be closed by any step, and the loop must let go of them before.
        contact.before_close = self._unwatch

    async def run(self, steps: Steps[Result]) -> Result:
        """Take all steps and return what comes of it; when cancelled, end them."""
        came = self._contact.came
        try:
            while True:
                self._contact.enter()  # it may have been closed meanwhile
                waiting = next(steps)
                if self._contact.came != came:
                    self._wake()
                await self._sleep(waiting)
                came = self._contact.came
        except StopIteration as stop:
            result: Result = stop.value
            return result
        finally:
            steps.close()
            # What this task did for the others, or kept to itself, is theirs to do now.
            self._wake()

    async def _sleep(self, waiting: Waiting) -> None:
        loop = asyncio.get_running_loop()
        left_s = waiting.until_s - self._contact.clock()
        ready = any(link.is_ready(wants_to_send=wants) for link, wants in waiting.links)
        if ready or left_s <= 0.0:
            await asyncio.sleep(0)
            return
        woken: asyncio.Future[None] = loop.create_future()
        timer = None
        if not math.isinf(left_s):
            timer = loop.call_later(left_s, _wake_one, woken)
        self._sleepers[woken] = waiting
        self._watch()
        try:
            await woken
        finally:
            del self._sleepers[woken]
            if timer is not None:
                timer.cancel()
            self._watch()

    def _wake(self) -> None:
        for woken in self._sleepers:
            _wake_one(woken)

    def _watch(self) -> None:
        """Watch what anybody waits for, and nothing else."""
        loop = asyncio.get_running_loop()
        wanted = {
            descriptor
            for waiting in self._sleepers.values()
            for link, _ in waiting.links
            if not link.is_closed
            for descriptor in link.descriptors
        }
        for descriptor in self._watched - wanted:
            loop.remove_reader(descriptor)
        for descriptor in wanted - self._watched:
            loop.add_reader(descriptor, self._wake)
        self._watched = wanted

    def _unwatch(self) -> None:
        for descriptor in self._watched:
            asyncio.get_running_loop().remove_reader(descriptor)
        self._watched = set()
        # They see by themselves what has become of their sockets.
        self._wake()


def _wake_one(woken: asyncio.Future[None]) -> None:
    # It may be cancelled, or woken by two at once.
    with contextlib.suppress(asyncio.InvalidStateError):
        woken.set_result(None)
