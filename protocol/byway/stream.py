"""
A stream of changes of one layer: what a `LayerSource` is made of, blocking or not.

Changes that nobody waits for are sent as soon as the window allows, and what becomes of them is
heard later: a refusal is raised by the next call. As long as the stream is open its layer is kept:
whoever drives the contact renews the lease, and finds out when the daemon has begun another life.
"""

from collections.abc import Sequence
from typing import Final

from byway import limits, obstacles
from byway.changing import LayerSettings, Made, claim
from byway.contact import Contact
from byway.errors import BadValue, NotOwner
from byway.link import Steps


class Stream:
    """
    The changes of one layer.

    Args:
        contact: Of the client.
        layer: Its name.
        window: How many changes may be undecided before one has to wait.

    Raises:
        BadValue: The name is none, or the window is not 1 to `limits.unacknowledged_max`.
        RuntimeError: The client has a stream for that layer already.
    """

    def __init__(self, contact: Contact, layer: str, window: int) -> None:
        if not obstacles.is_id(layer):
            raise BadValue(f"{layer!r:.80} is no name for a layer", {"field": "layer"})
        if not 1 <= window <= limits.unacknowledged_max:
            raise BadValue(
                f"a window has 1 to {limits.unacknowledged_max} changes, not {window}",
                {"field": "window"},
            )
        if layer in contact.source.kept:
            raise RuntimeError(f"there is an open source for layer {layer} already")
        self.layer: Final = layer
        self._contact: Final = contact
        self._window: Final = window
        self._is_closed = False
        #: As the layer was claimed last.
        self.settings: LayerSettings = {}
        #: The newest revision that is known to have all changes up to some.
        self.revision = 0

    def claim(self, settings: LayerSettings) -> Steps[int]:
        """Claim the layer, with what it was claimed with before but for these; it is kept now."""
        contact = self._contact
        contact.enter()
        self._refuse_if_closed()
        wanted: LayerSettings = {**self.settings, **settings}
        claims, is_new = claim(self.layer, wanted), self.layer not in contact.source.kept
        contact.source.kept.add(self.layer)
        # What was lost before is what this call makes good.
        contact.source.losses = [each for each in contact.source.losses if each[0] != self.layer]
        try:
            self.revision = yield from contact.change(claims)
        except BaseException:
            if is_new:
                contact.source.kept.discard(self.layer)
            raise
        self.settings = wanted
        return self.revision

    def enter(self) -> None:
        """Refuse with RuntimeError what must not be; raise what nobody has heard of."""
        self._contact.enter()
        self._refuse_if_closed()
        self._contact.raise_losses(self.layer)
        if not self._contact.source.knows(self.layer):
            raise NotOwner(
                f"layer {self.layer} belongs to another source by now; claim it again to have it",
                {"layer": self.layer},
            )

    def _refuse_if_closed(self) -> None:
        if self._is_closed:
            raise RuntimeError(f"the source of layer {self.layer} is closed")

    @property
    def undecided(self) -> int:
        """How many changes the daemon has not decided."""
        line = self._contact.source.line
        return sum(sent.message.layer == self.layer and not sent.is_decided for sent in line)

    def send(self, changes: Sequence[Made], *, waits: bool) -> Steps[int]:
        """
        Send changes.

        Returns:
            The revision that has them; if nobody waits, the newest that is known.

        Raises:
            BywayError: Of an earlier change that nobody has waited for; this one is not sent then.
                If somebody waits, as `Client.put`.
            LinkFault: The window is full, and nothing has been decided in time.
        """
        self.enter()
        contact = self._contact
        contact.work()
        contact.raise_losses(self.layer)
        yield from contact.meet()
        for made in changes:
            yield from contact.make_room(limits.unacknowledged_max)
            yield from contact.make_room(self._window, self.layer)
            sent = contact.add(made, is_awaited=waits)
            contact.work()
            if not waits:
                continue
            yield from contact.settle(sent)
            for each in sent:
                if each.error is not None:
                    raise each.error
        self.revision = contact.source.revision
        return self.revision

    def settle(self) -> Steps[int]:
        """Wait until all changes are decided; return the revision that has them."""
        self.enter()
        contact = self._contact
        line = contact.source.line
        yield from contact.settle([each for each in line if each.message.layer == self.layer])
        contact.raise_losses(self.layer)
        self.revision = contact.source.revision
        return self.revision

    def tend(self, for_s: float) -> Steps[None]:
        """Look after the layer for so long, with what there is to do; raise what was refused."""
        self.enter()
        contact = self._contact
        end_s = contact.clock() + for_s
        contact.work()
        while contact.clock() < end_s:
            yield from contact.idle(end_s)
            contact.raise_losses(self.layer)
        self.revision = contact.source.revision
        contact.raise_losses(self.layer)

    def close(self) -> None:
        """Keep the layer no longer; it stays as it is."""
        if not self._is_closed:
            self._is_closed = True
            self._contact.source.kept.discard(self.layer)
