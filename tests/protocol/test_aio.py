"""The client for asyncio: the same calls, many at once, and a layer looked after by a task."""

import asyncio
from collections.abc import AsyncIterator, Callable, Coroutine
from contextlib import asynccontextmanager
from typing import Any

import numpy as np
import pytest
from tests.protocol.fake_daemon import FakeDaemon, set_patience

import byway
from byway import messages
from byway.aio import AsyncClient

START, GOAL = (0.0, 0.0, 0.0), (5.0, 0.0, 0.0)
PILE = {"pile": (1.0, 1.0, 1.0)}
CELLS = np.zeros((2, 2), np.uint8)
Within = Callable[[Coroutine[Any, Any, None]], None]


@pytest.fixture
def within() -> Within:
    """Runs a test's coroutine in a loop of its own, which must have nothing left in the end."""

    def run(work: Coroutine[Any, Any, None]) -> None:
        async def bounded() -> None:
            await asyncio.wait_for(work, 20.0)
            assert asyncio.all_tasks() == {asyncio.current_task()}

        asyncio.run(bounded(), debug=True)

    return run


@asynccontextmanager
async def client_of(daemon: FakeDaemon, **settings: Any) -> AsyncIterator[AsyncClient]:
    async with AsyncClient(daemon.endpoints["requests"], **settings) as client:
        yield client


async def until(holds: Callable[[], object]) -> None:
    """Return when it is true."""
    while not holds():
        await asyncio.sleep(0.005)


def test_all_questions_and_changes(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon, client_id="controller") as client:
            assert (client.client_id, client.epoch) == ("controller", "")
            assert (await client.hello()).state == "ready"
            assert client.epoch == daemon.epoch
            assert client.clock_offset_s is not None
            assert (await client.vehicles())[0].name == "tug"
            assert (await client.health()).state == "ready"
            assert (await client.site(guards=True)).layers == {}
            assert await client.claim("fixed", lease_s=5.0) == 1
            assert await client.replace_layer("fixed", discs=PILE) == 2
            assert await client.put("fixed", boxes={"box": (0, 0, 0, 2, 1)}) == 3
            assert await client.drop("fixed", ["pile"]) == 4
            assert await client.patch("fixed", (0, 0), 0.5, CELLS) == 5
            assert await client.scan("fixed", START, [0.0], [1.0], 5.0) == 6
            track = byway.Track(pose=START, radius_m=0.5)
            assert await client.track("fixed", {"fork": track}) == 7
            assert set(daemon.layers["fixed"]["obstacles"]) == {"box", "fork"}
            answer = await client.replan("tug", START, GOAL, 0.05, seed=3)
            assert answer.cost == 5.0
            assert (await client.guard(answer)).state == "clear"
            assert (await client.progress(1.0)).progress_m == 1.0
            assert (await client.release()).state == "released"
            assert not await client.cancel()
            assert not await client.finish()

    within(work())


def test_many_replans_and_changes_at_once(within: Within, daemon: FakeDaemon) -> None:
    """Whoever takes in the messages has those of the others among them."""

    async def work() -> None:
        async with client_of(daemon, repeat_s=30.0, timeout_s=15.0) as client:
            daemon.holds = True
            replans = [
                asyncio.create_task(client.replan("tug", START, GOAL, 5.0, unit=f"u-{number}"))
                for number in range(8)
            ]
            await asyncio.gather(*(client.put(f"l-{n}", discs=PILE) for n in range(8)))
            await until(lambda: len(daemon.open) == 8)
            assert (await client.health()).planning == 8
            await asyncio.to_thread(daemon.release)
            answers = await asyncio.gather(*replans)
            assert [answer.unit for answer in answers] == [f"u-{n}" for n in range(8)]

    within(work())


def test_better_routes_and_the_end_of_a_replan(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon) as client:
            daemon.holds = True
            heard: list[float] = []
            ask = await client.start_replan(
                "tug", START, GOAL, 5.0, unit="u", on_better=lambda b: heard.append(b.cost)
            )
            waiting = asyncio.create_task(ask.wait())
            await asyncio.to_thread(daemon.better, 9.0, 8.0)
            await until(lambda: heard == [9.0, 8.0])
            assert await ask.finish()
            assert (await waiting).cost == 5.0
            assert not await ask.cancel()
            assert ask.unit == "u"

    within(work())


def test_a_cancelled_task_leaves_the_others_alone(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon) as client:
            daemon.holds = True
            tasks = [
                asyncio.create_task(client.replan("tug", START, GOAL, 5.0, unit=unit))
                for unit in ("a", "b")
            ]
            await until(lambda: len(daemon.open) == 2)
            tasks[0].cancel()
            with pytest.raises(asyncio.CancelledError):
                await tasks[0]
            await asyncio.to_thread(daemon.release)
            assert (await tasks[1]).unit == "b"

    within(work())


def test_a_closed_client_ends_its_calls(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        client = AsyncClient(daemon.endpoints["requests"])
        daemon.holds = True
        task = asyncio.create_task(client.replan("tug", START, GOAL, 5.0))
        await until(lambda: len(daemon.open) == 1)
        await client.close()
        with pytest.raises(RuntimeError, match="closed"):
            await task
        with pytest.raises(RuntimeError, match="closed"):
            await client.health()
        await client.close()

    within(work())


def test_no_daemon_is_told_to_all_in_time(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon) as client:
            await client.hello()
            daemon.stop()
            set_patience(client, reconnect_s=0.05)
            began_s = client._contact.clock()
            calls = [client.health() for _ in range(5)]
            found = await asyncio.gather(*calls, return_exceptions=True)
            assert all(isinstance(each, byway.DaemonLost) for each in found)
            # Each has waited its own time, and none that of the others.
            assert client._contact.clock() - began_s < 1.0

    within(work())


def test_a_broken_connection_is_made_good(within: Within, daemon: FakeDaemon) -> None:
    """Sockets are closed and opened while the loop watches their descriptors."""

    async def work() -> None:
        async with client_of(daemon, repeat_s=0.5) as client:
            daemon.holds = True
            tasks = [
                asyncio.create_task(client.replan("tug", START, GOAL, 5.0, unit=unit))
                for unit in ("a", "b")
            ]
            await until(lambda: len(daemon.open) == 2)
            epoch, open_replans = daemon.epoch, dict(daemon.open)
            await asyncio.to_thread(daemon.stop)
            daemon.start()
            daemon.epoch, daemon.open = epoch, open_replans
            assert (await client.health()).planning == 2
            await asyncio.to_thread(daemon.release)
            assert [(await task).unit for task in tasks] == ["a", "b"]

    within(work())


def test_events(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon) as client:
            assert [each async for each in client.listen(["better"], timeout_s=0.01)] == []
            hearing = client.listen(["layers"], timeout_s=10.0)
            first = asyncio.create_task(anext(hearing))
            await asyncio.to_thread(daemon.wait_for_subscription, "layers")
            told = messages.LayerState(layer="lidar", state="stale", age_s=2.0)
            await asyncio.to_thread(daemon.do, lambda: daemon.publish("layers.lidar", told))
            event = await first
            assert (event.topic, event.content) == ("layers.lidar", told)
            await hearing.aclose()

    within(work())


def test_a_source_streams_and_settles(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon) as client, await client.source("stacks", window=4) as stacks:
            assert stacks.layer == "stacks"
            for number in range(20):
                await stacks.put(discs={f"pile-{number}": (1, 1, 1)}, wait=False)
                assert stacks.undecided <= 4
            await stacks.settle()
            assert stacks.undecided == 0
            assert len(daemon.layers["stacks"]["obstacles"]) == 20
            assert await stacks.replace(discs=PILE) == stacks.revision
            await stacks.drop(["pile"], wait=False)
            await stacks.patch((0, 0), 0.5, CELLS, 0.1)
            await stacks.scan(START, [0.0], [1.0], 5.0)
            await stacks.track({"fork": byway.Track(pose=START, radius_m=0.5)})
            assert set(daemon.layers["stacks"]["obstacles"]) == {"fork"}
            await stacks.claim(expected_period_s=1.0)

    within(work())


def test_a_source_finds_out_by_itself_that_the_daemon_is_another(
    within: Within, daemon: FakeDaemon
) -> None:
    async def work() -> None:
        async with client_of(daemon) as client, await client.source("stacks") as stacks:
            await stacks.put(discs=PILE)
            for _ in range(2):
                await asyncio.to_thread(daemon.restart)
                began_s = client._contact.clock()
                await until(lambda: "pile" in daemon.layers.get("stacks", {}).get("obstacles", ()))
                assert client._contact.clock() - began_s < 2.0
            other = await client.source("other")
            other.close()

    within(work())


def test_a_daemon_that_is_away_for_long_is_found_again(within: Within, daemon: FakeDaemon) -> None:
    async def work() -> None:
        async with client_of(daemon, reconnect_s=0.05) as client:
            stacks = await client.source("stacks")
            await stacks.put(discs=PILE)
            await asyncio.to_thread(daemon.stop)
            await asyncio.sleep(0.3)
            daemon.start()
            await until(lambda: "pile" in daemon.layers.get("stacks", {}).get("obstacles", ()))

    within(work())
