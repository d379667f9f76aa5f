"""
The surveyor: the one process that owns the site and writes to the shared memory.

It takes batches of changes, one at a time and in order, makes each change whole or refuses it
whole, publishes once per batch, and says which revision that made. It is not niced: what it
does, acknowledgements wait for.
"""

import time
import traceback
from collections import deque
from collections.abc import Mapping
from typing import Any, Final

from bywayd.crew.blackbox import BlackBox, deaths_until_refused
from bywayd.crew.channel import Channel
from bywayd.crew.memory import SiteMemory
from bywayd.crew.skills import Published, Refused, SiteKeeping, Skills

#: How often a busy surveyor says that it is alive; it owes a sign every 500 ms.
alive_every_s: Final = 0.2


class Surveyor:
    """The life of one surveyor process; `run` does not return."""

    def __init__(self, channel: Channel, memory: SiteMemory, skills: Skills) -> None:
        self._channel = channel
        self._memory = memory
        self._box = BlackBox(memory.map_blackbox())
        self._ground = memory.map_writable()
        self._skills = skills
        self._waiting: deque[dict[str, Any]] = deque()
        self._alive_s = 0.0
        self._settings: dict[str, Any] = {}
        #: The current snapshot, and the handles of all that somebody may still be reading.
        self._published = Published(0, {})
        self._in_use: dict[int, dict[str, Any]] = {}
        #: Guarded routes as they were ordered, and what was said of each last.
        self._orders: dict[int, dict[str, Any]] = {}
        self._seen: dict[int, dict[str, Any] | None] = {}

    def run(self) -> None:
        """Take up the site, say ready, then do what comes until the channel is closed."""
        site = self._begin(self._next())
        self._say("ready", next_in_s=self._next_in_s(site))
        while True:
            message = self._next()
            what = message["do"]
            if what == "apply":
                site = self._apply(site, message)
                self._look(site)
            elif what == "watch":
                self._watch(site, message)
            elif what == "move":
                site.move(message["guard"], message["progress_m"])
                self._look(site)
            elif what == "unwatch":
                site.unwatch(message["guard"])
                self._seen.pop(message["guard"], None)
                self._orders.pop(message["guard"], None)
            elif what == "release":
                self._release(site, message["revision"])
            elif what == "describe":
                self._describe(site, message)
            elif what == "ping":
                self._channel.wait_put({"say": "alive"})

    def _next(self) -> dict[str, Any]:
        while not self._waiting:
            self._waiting.extend(self._channel.wait_take())
        return self._waiting.popleft()

    def _begin(self, order: dict[str, Any]) -> SiteKeeping:
        self._settings = order["settings"]
        if order["revision"] is None:
            site = self._skills.new_site(self._settings, self._ground, self._memory.grow)
            self._publish(site)
            return site
        self._published = Published(order["revision"], order["handle"])
        self._in_use = {handle["revision"]: handle for handle in order["in_use"]}
        self._in_use[order["revision"]] = order["handle"]
        return self._take_up_again()

    def _take_up_again(self) -> SiteKeeping:
        """Return the site as it was published last, whatever has been done to it since."""
        return self._skills.recover_site(
            self._settings,
            self._ground,
            self._memory.grow,
            self._published.handle,
            list(self._in_use.values()),
        )

    def _publish(self, site: SiteKeeping) -> None:
        self._published = site.publish()
        self._in_use[self._published.revision] = self._published.handle

    def _release(self, site: SiteKeeping, revision: int) -> None:
        self._in_use = {number: h for number, h in self._in_use.items() if number >= revision}
        site.release_before(revision)

    def _apply(self, site: SiteKeeping, message: Mapping[str, Any]) -> SiteKeeping:
        """
        Apply a batch and publish it; return the site to go on with.

        A change that the site does not understand (`Refused`) leaves no trace. One that breaks
        something, or finds no room, may have: then the site is taken up again as it was
        published last, and the batch is gone through once more without that change.
        """
        changes: list[Mapping[str, Any]] = message["changes"]
        refusals = self._refused_for_deaths(len(changes))
        while (breaking := self._go_through(site, changes, refusals)) is not None:
            index, refused = breaking
            refusals[index] = refused
            site = self._take_up_again()
            self._watch_all(site)
        try:
            self._box.note(len(changes))
            site.carry(message["at_s"])
            self._publish(site)
        except MemoryError as fault:
            refusals |= {i: _no_room(fault) for i in range(len(changes)) if i not in refusals}
            site = self._take_up_again()
            self._watch_all(site)
        self._box.batch_done()
        told = [_refusal(index, refused) for index, refused in sorted(refusals.items())]
        self._say(
            "snapshot",
            batch=message["batch"],
            refusals=told,
            obstacles=site.obstacles(),
            tracks=site.tracks(),
            next_in_s=self._next_in_s(site),
        )
        return site

    @staticmethod
    def _next_in_s(site: SiteKeeping) -> float | None:
        now_s = time.monotonic()
        due_s = site.next_carry_s(now_s)
        return None if due_s is None else max(0.0, due_s - now_s)

    # -- guarded routes ---------------------------------------------------------------------

    def _watch(self, site: SiteKeeping, order: dict[str, Any]) -> None:
        guard = order["guard"]
        try:
            site.watch(order)
        except Refused as refused:
            self._say_seen(guard, None, refused.text)
            return
        self._orders[guard] = order
        self._look(site)

    def _watch_all(self, site: SiteKeeping) -> None:
        """A site that was taken up again knows of no routes."""
        for order in self._orders.values():
            site.watch(order)

    def _look(self, site: SiteKeeping) -> None:
        """Look at all watched routes, and say what is another than was said last."""
        for guard, blocked in site.look():
            if guard not in self._seen or self._seen[guard] != blocked:
                self._seen[guard] = blocked
                self._say_seen(guard, blocked)
            self._sign_of_life()

    def _say_seen(self, guard: int, blocked: dict[str, Any] | None, fault: str = "") -> None:
        self._channel.wait_put(
            {
                "say": "guard",
                "guard": guard,
                "revision": self._published.revision,
                "blocked": blocked,
                "fault": fault,
            }
        )

    def _refused_for_deaths(self, count: int) -> dict[int, Refused]:
        """Refuse what has killed our predecessors: one change, or the publishing of them all."""
        place = self._box.deadly_place
        if place is None:
            return {}
        text = f"{deaths_until_refused} surveyors were lost over this"
        deadly = [place] if place < count else range(count)
        return {index: Refused("internal", text) for index in deadly}

    def _go_through(
        self, site: SiteKeeping, changes: list[Mapping[str, Any]], refusals: dict[int, Refused]
    ) -> tuple[int, Refused] | None:
        """Make the changes that are not refused yet; return the one that breaks the site."""
        for index, change in enumerate(changes):
            if index in refusals:
                continue
            self._box.note(index)
            try:
                for _ in site.apply(change):
                    self._sign_of_life()
            except Refused as refused:
                refusals[index] = refused
            except MemoryError as fault:
                return index, _no_room(fault)
            except Exception as fault:
                self._channel.wait_put({"say": "trouble", "text": traceback.format_exc()})
                text = f"the site failed at this change: {type(fault).__name__}"
                return index, Refused("internal", text)
            self._sign_of_life()
        return None

    def _describe(self, site: SiteKeeping, message: Mapping[str, Any]) -> None:
        told: dict[str, Any]
        try:
            fields, packed = site.describe(message["question"], time.monotonic())
            told = {"fields": fields, "packed": packed}
        except Refused as refused:
            told = {"refusal": _refusal(0, refused)}
        except Exception as fault:
            # Somebody wants to look at the site; that must not cost it its keeper.
            self._channel.wait_put({"say": "trouble", "text": traceback.format_exc()})
            text = f"the site could not be described: {type(fault).__name__}"
            told = {"refusal": _refusal(0, Refused("internal", text))}
        self._channel.wait_put({"say": "site", "ticket": message["ticket"], **told})

    def _sign_of_life(self) -> None:
        now_s = time.monotonic()
        if now_s >= self._alive_s:
            self._alive_s = now_s + alive_every_s
            self._channel.wait_put({"say": "alive"})

    def _say(self, what: str, **more: Any) -> None:
        self._channel.wait_put(
            {
                "say": what,
                "revision": self._published.revision,
                "handle": self._published.handle,
                "memory_bytes": self._memory.taken_bytes,
                **more,
            }
        )


def _no_room(fault: MemoryError) -> Refused:
    return Refused("too_large", f"the site has no room for this: {fault}")


def _refusal(index: int, refused: Refused) -> dict[str, Any]:
    return {
        "index": index,
        "code": refused.code,
        "text": refused.text,
        "facts": refused.facts,
    }


def survey(channel: Channel, memory: SiteMemory, skills: Skills) -> None:
    """Be the surveyor until the front closes the channel."""
    Surveyor(channel, memory, skills).run()
