"""
A source and a daemon between which anything is lost: in the end the daemon has what was said.

The daemon here is the smallest that keeps to the document: numbers, epochs, gaps, and what each
layer holds. It may be started again at any time, and then has nothing.
"""

from typing import Any

from hypothesis import given, settings
from hypothesis import strategies as st

from byway import frames, messages, obstacles, tracks
from byway.source import Source

LAYERS = ("a", "b")
names = st.sets(st.sampled_from("pq"), min_size=1, max_size=2)
layers = st.sampled_from(LAYERS)
steps = st.lists(
    st.one_of(
        st.tuples(st.just("put"), layers, names),
        st.tuples(st.just("track"), layers, names),
        st.tuples(st.just("drop"), layers, names),
        st.tuples(st.just("replace"), layers, names),
        st.tuples(st.just("keep"), layers, names),
        # How many messages get through to the daemon, and then how many of its replies.
        st.tuples(st.just("exchange"), st.integers(0, 2), st.integers(0, 2)),
        st.tuples(st.just("exchange"), st.just(100), st.just(100)),
        st.tuples(st.just("again"), st.none(), st.none()),
        st.tuples(st.just("restart"), st.none(), st.none()),
    ),
    min_size=8,
    max_size=30,
)


class LittleDaemon:
    """Takes in frames and gives replies."""

    def __init__(self) -> None:
        self.lives = 0
        self.restart()

    def restart(self) -> None:
        self.lives += 1
        self.epoch = f"e{self.lives}"
        self.have = 0
        self.layers: dict[str, dict[str, str]] = {}

    def take(self, came: frames.Received) -> messages.Reply:
        number, message = came.header.number, came.message
        if came.header.epoch != self.epoch:
            return messages.Resend(source="s", reason="epoch", have=0)
        if number > self.have + 1:
            return messages.Resend(source="s", reason="gap", have=self.have)
        if number == self.have + 1:
            self.have = number
            self._apply(message, came.packed)
        return messages.Acknowledged(source="s", number=self.have, revision=self.have)

    def _apply(self, message: Any, packed: Any) -> None:
        held = self.layers.setdefault(message.layer, {})
        match message:
            case messages.ReplaceLayer() | messages.Put():
                if isinstance(message, messages.ReplaceLayer):
                    held.clear()
                held |= dict.fromkeys(obstacles.unpack_shapes(message, packed).discs, "stands")
            case messages.Track():
                held |= dict.fromkeys(tracks.unpack_tracks(message, packed), "moves")
            case messages.Drop():
                for obstacle_id in message.ids:
                    held.pop(obstacle_id, None)


def made(what: str, layer: str, ids: set[str]) -> tuple[messages.AnyChange, bytes]:
    if what == "drop":
        return messages.Drop(layer=layer, ids=sorted(ids)), b""
    if what == "track":
        found = {each: tracks.Track(pose=(0, 0, 0), radius_m=1.0) for each in ids}
        fields, packed = tracks.pack_tracks(found)
        return messages.Track(layer=layer, expires_in_s=1e6, **fields), packed
    fields, packed = obstacles.pack_shapes(obstacles.shapes(None, dict.fromkeys(ids, (0, 0, 1))))
    kind = messages.Put if what == "put" else messages.ReplaceLayer
    return kind(layer=layer, **fields), packed


def say(wanted: dict[str, dict[str, str]], what: str, layer: str, ids: set[str]) -> None:
    """What the layers shall be in the end."""
    held = wanted[layer]
    if what == "replace":
        held.clear()
    for each in ids:
        if what == "drop":
            held.pop(each, None)
        else:
            held[each] = "moves" if what == "track" else "stands"


class World:
    """A source, a daemon, what is on the way, and what was said."""

    def __init__(self) -> None:
        self.source, self.daemon = Source("s"), LittleDaemon()
        self.source.begin_again(self.daemon.epoch, 0, 0.0)
        self.source.kept.update(LAYERS)
        self.wanted: dict[str, dict[str, str]] = {layer: {} for layer in LAYERS}

    def step(self, what: str, one: Any, other: Any) -> None:
        if what == "exchange":
            self.exchange(one, other)
        elif what == "again":
            self.source.send_again()
        elif what == "restart":
            self.daemon.restart()
        elif what == "keep":
            self.source.keep(0.0, asks_who_is_there=True)
        else:
            self.source.add(*made(what, one, other), 0.0)
            say(self.wanted, what, one, other)

    def exchange(self, there: int, back: int) -> None:
        came = [frames.decode(parts, frames.UPDATES) for parts in self.source.unsent(0.0)]
        replies = [(self.daemon.take(each), self.daemon.epoch) for each in came[:there]]
        for reply, epoch in replies[:back]:
            if isinstance(reply, messages.Resend):
                self.source.resend(reply, epoch, 0.0)
            elif isinstance(reply, messages.Acknowledged) and epoch == self.source.epoch:
                self.source.acknowledged(reply, 0.0)


@settings(max_examples=100, deadline=None)
@given(steps)
def test_in_the_end_the_daemon_has_what_was_said(found: list[tuple[str, Any, Any]]) -> None:
    world = World()
    for what, one, other in found:
        world.step(what, one, other)
    # Nothing is lost any more: a few rounds must do, and a sign of life finds a fresh daemon.
    for _ in range(4):
        world.source.send_again()
        world.exchange(100, 100)
        world.source.keep(0.0, asks_who_is_there=True)
    world.exchange(100, 100)
    assert not world.source.line
    spoken = {layer for _, layer, ids in found if isinstance(ids, set)}
    for layer in spoken:
        assert world.daemon.layers.get(layer, {}) == world.wanted[layer]
