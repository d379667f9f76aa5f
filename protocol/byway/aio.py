"""
The client for asyncio: the same calls as in client.py, as coroutines.

    async with byway.aio.AsyncClient("tcp://127.0.0.1:7461") as client:
        async with await client.source("stacks", lease_s=5.0) as stacks:
            await stacks.put(discs={"pile-7": (9.0, 3.0, 1.5)})
            answer = await client.replan("tug", (2.0, 2.0, 0.0), (40.0, 22.0, 1.57), 0.05)

Any number of tasks of one event loop may use a client at once; a replan that is waited for holds
nobody up.
"""

from __future__ import annotations

import asyncio
import math
import time
from collections.abc import AsyncGenerator, Iterable, Sequence
from types import TracebackType
from typing import Any, Final, Unpack

import numpy.typing as npt

from byway import asking, changing, messages, obstacles, scans, tracks
from byway.aio_drive import LoopDrive
from byway.answer import Answer, Found, Route
from byway.ask import Asked, OnBetter, begin, steer
from byway.asking import GuardOptions, Pose, ReplanOptions
from byway.changing import LayerSettings, Made
from byway.client import Vehicle, vehicles_of
from byway.contact import Contact
from byway.conversation import Clock, Patience
from byway.event import TOPICS, Event, event_of
from byway.keys import KeysFrom
from byway.site_view import SiteView, site_view
from byway.stream import Stream


class AsyncAsk:
    """
    What `AsyncClient.start_replan` returns.

    Attributes:
        id: Of the request.
        unit: Whose route it is.
    """

    def __init__(self, asked: Asked, drive: LoopDrive) -> None:
        self._asked = asked
        self._drive = drive
        self.id: Final = asked.id
        self.unit: Final = asked.message.unit

    async def wait(self, on_better: OnBetter | None = None) -> Answer:
        """As `Ask.wait`."""
        return await self._drive.run(self._asked.wait(on_better))

    async def cancel(self) -> bool:
        """As `Ask.cancel`."""
        return await self._drive.run(self._asked.cancel())

    async def finish(self) -> bool:
        """As `Ask.finish`."""
        return await self._drive.run(self._asked.finish())


class AsyncLayerSource:
    """
    What `AsyncClient.source` returns: as `LayerSource`.

    A task of the client looks after the layer, so there is nothing to be tended.
    """

    def __init__(self, stream: Stream, drive: LoopDrive) -> None:
        self._stream: Final = stream
        self._drive = drive

    async def __aenter__(self) -> AsyncLayerSource:
        return self

    async def __aexit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Look after the layer no longer; it stays as it is."""
        self._stream.close()

    @property
    def layer(self) -> str:
        """Its name."""
        return self._stream.layer

    @property
    def revision(self) -> int:
        """The newest revision of the site that is known to have changes of this client."""
        return self._stream.revision

    @property
    def undecided(self) -> int:
        """How many changes of the layer the daemon has not decided."""
        return self._stream.undecided

    async def settle(self) -> int:
        """As `LayerSource.settle`."""
        return await self._drive.run(self._stream.settle())

    async def claim(self, **settings: Unpack[LayerSettings]) -> int:
        """As `LayerSource.claim`."""
        return await self._drive.run(self._stream.claim(settings))

    async def put(
        self,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        expires_in_s: float | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        wait: bool = True,
    ) -> int:
        """As `Client.put`."""
        made = changing.put(self.layer, polygons, discs, boxes, expires_in_s)
        return await self._send(made, wait)

    async def replace(
        self,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        expires_in_s: float | None = None,
        wait: bool = True,
    ) -> int:
        """As `LayerSource.replace`."""
        settings = self._stream.settings
        made = changing.replace_layer(self.layer, polygons, discs, boxes, expires_in_s, settings)
        return await self._send(made, wait)

    async def drop(self, ids: Iterable[str], *, wait: bool = True) -> int:
        """As `Client.drop`."""
        return await self._send(changing.drop(self.layer, ids), wait)

    async def patch(
        self,
        corner_m: Sequence[float],
        cell_m: float,
        cells: npt.NDArray[Any],
        heading_rad: float = 0.0,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.patch`."""
        made = changing.patch(self.layer, corner_m, cell_m, cells, heading_rad)
        return await self._send(made, wait)

    async def scan(
        self,
        origin: Sequence[float],
        bearings_rad: scans.Numbers,
        ranges_m: scans.Numbers,
        range_m_max: float,
        range_m_min: float = 0.0,
        age_s: float = 0.0,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.scan`."""
        made = changing.scan(
            self.layer, origin, bearings_rad, ranges_m, range_m_max, range_m_min, age_s
        )
        return await self._send(made, wait)

    async def track(
        self,
        found: tracks.Tracks,
        age_s: float = 0.0,
        expires_in_s: float | None = None,
        *,
        wait: bool = True,
    ) -> int:
        """As `Client.track`."""
        return await self._send(changing.track(self.layer, found, age_s, expires_in_s), wait)

    async def _send(self, made: Sequence[Made], wait: bool) -> int:
        return await self._drive.run(self._stream.send(made, waits=wait))


class AsyncClient:
    """
    A conversation with one daemon: as `Client`, for the tasks of one event loop.

    Args:
        endpoint, timeout_s, reconnect_s, repeat_s, client_id, clock: As `Client`.
    """

    def __init__(
        self,
        endpoint: str,
        *,
        timeout_s: float = 5.0,
        reconnect_s: float = 1.0,
        repeat_s: float = 1.0,
        client_id: str | None = None,
        keys: KeysFrom | None = None,
        clock: Clock = time.monotonic,
    ) -> None:
        patience = Patience(timeout_s, reconnect_s, repeat_s)
        self._contact: Final = Contact(endpoint, patience, client_id, clock, keys)
        self._drive: Final = LoopDrive(self._contact)
        self._tender: asyncio.Task[None] | None = None

    async def __aenter__(self) -> AsyncClient:
        return self

    async def __aexit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        await self.close()

    async def close(self) -> None:
        """
        Close all sockets. What the daemon has not acknowledged is forgotten here.

        Tasks that are in calls of this client hear of it by RuntimeError.
        """
        tender, self._tender = self._tender, None
        if tender is not None:
            tender.cancel()
            await asyncio.wait([tender])
        self._contact.close()

    # -- questions -----------------------------------------------------------------------------

    async def hello(self) -> messages.Welcome:
        """As `Client.hello`."""
        return await self._drive.run(self._contact.hello())

    @property
    def client_id(self) -> str:
        """As `Client.client_id`."""
        return self._contact.client_id

    @property
    def epoch(self) -> str:
        """As `Client.epoch`."""
        return self._contact.epoch

    @property
    def clock_offset_s(self) -> float | None:
        """As `Client.clock_offset_s`."""
        return self._contact.clock_offset_s

    async def vehicles(self) -> list[Vehicle]:
        """As `Client.vehicles`."""
        asked = self._contact.ask(messages.Vehicles(), messages.VehiclesAre)
        return vehicles_of(await self._drive.run(asked))

    async def health(self) -> messages.HealthIs:
        """As `Client.health`."""
        return await self._drive.run(self._contact.ask(messages.Health(), messages.HealthIs))

    async def site(
        self,
        layers: Iterable[str] | None = None,
        *,
        box_m: Sequence[float] | None = None,
        cells: bool = True,
        guards: bool = False,
    ) -> SiteView:
        """As `Client.site`."""
        asked = asking.site(layers, box_m, cells, guards)
        return site_view(await self._drive.run(self._contact.ask_raw(asked)))

    # -- replans -------------------------------------------------------------------------------

    async def replan(
        self,
        vehicle: str,
        start: Pose,
        goal: Pose,
        budget_s: float,
        *,
        unit: str | None = None,
        on_better: OnBetter | None = None,
        **options: Unpack[ReplanOptions],
    ) -> Answer:
        """As `Client.replan`. Cancelled, it is not waited for any more, and goes on there."""
        ask = await self.start_replan(
            vehicle, start, goal, budget_s, unit=unit, on_better=on_better, **options
        )
        return await ask.wait()

    async def start_replan(
        self,
        vehicle: str,
        start: Pose,
        goal: Pose,
        budget_s: float,
        *,
        unit: str | None = None,
        on_better: OnBetter | None = None,
        **options: Unpack[ReplanOptions],
    ) -> AsyncAsk:
        """As `Client.start_replan`."""
        unit = self.client_id if unit is None else unit
        asked = asking.replan(vehicle, start, goal, budget_s, unit, options)
        return AsyncAsk(await self._drive.run(begin(self._contact, asked, on_better)), self._drive)

    async def cancel(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """As `Client.cancel`."""
        asked = asking.steer(messages.Cancel, unit, replan, self.client_id)
        return await self._drive.run(steer(self._contact, asked))

    async def finish(self, unit: str | None = None, *, replan: str | None = None) -> bool:
        """As `Client.finish`."""
        asked = asking.steer(messages.Finish, unit, replan, self.client_id)
        return await self._drive.run(steer(self._contact, asked))

    # -- guards --------------------------------------------------------------------------------

    async def guard(
        self, found: Found | Route, **options: Unpack[GuardOptions]
    ) -> messages.GuardIs:
        """As `Client.guard`."""
        asked, packed = asking.guard(found, self.client_id, options)
        return await self._drive.run(self._contact.ask(asked, messages.GuardIs, packed))

    async def progress(
        self,
        progress_m: float,
        speed_mps: float | None = None,
        *,
        unit: str | None = None,
        guard: str | None = None,
    ) -> messages.GuardIs:
        """As `Client.progress`."""
        unit = self.client_id if unit is None else unit
        asked = asking.progress(unit, progress_m, speed_mps, guard)
        return await self._drive.run(self._contact.ask(asked, messages.GuardIs))

    async def release(
        self, unit: str | None = None, *, guard: str | None = None
    ) -> messages.GuardIs:
        """As `Client.release`."""
        asked = asking.release(self.client_id if unit is None else unit, guard)
        return await self._drive.run(self._contact.ask(asked, messages.GuardIs))

    # -- changes of the site -------------------------------------------------------------------

    async def _change(self, made: Sequence[Made]) -> int:
        return await self._drive.run(self._contact.change(made))

    async def claim(self, layer: str, **settings: Unpack[LayerSettings]) -> int:
        """As `Client.claim`."""
        return await self._change(changing.claim(layer, settings))

    async def replace_layer(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
        expires_in_s: float | None = None,
        **settings: Unpack[LayerSettings],
    ) -> int:
        """As `Client.replace_layer`."""
        return await self._change(
            changing.replace_layer(layer, polygons, discs, boxes, expires_in_s, settings)
        )

    async def put(
        self,
        layer: str,
        polygons: obstacles.Polygons | None = None,
        discs: obstacles.Discs | None = None,
        expires_in_s: float | None = None,
        *,
        boxes: obstacles.Boxes | None = None,
    ) -> int:
        """As `Client.put`."""
        return await self._change(changing.put(layer, polygons, discs, boxes, expires_in_s))

    async def drop(self, layer: str, ids: Iterable[str]) -> int:
        """As `Client.drop`."""
        return await self._change(changing.drop(layer, ids))

    async def patch(
        self,
        layer: str,
        corner_m: Sequence[float],
        cell_m: float,
        cells: npt.NDArray[Any],
        heading_rad: float = 0.0,
    ) -> int:
        """As `Client.patch`."""
        return await self._change(changing.patch(layer, corner_m, cell_m, cells, heading_rad))

    async def scan(
        self,
        layer: str,
        origin: Sequence[float],
        bearings_rad: scans.Numbers,
        ranges_m: scans.Numbers,
        range_m_max: float,
        range_m_min: float = 0.0,
        age_s: float = 0.0,
    ) -> int:
        """As `Client.scan`."""
        return await self._change(
            changing.scan(layer, origin, bearings_rad, ranges_m, range_m_max, range_m_min, age_s)
        )

    async def track(
        self,
        layer: str,
        found: tracks.Tracks,
        age_s: float = 0.0,
        expires_in_s: float | None = None,
    ) -> int:
        """As `Client.track`."""
        return await self._change(changing.track(layer, found, age_s, expires_in_s))

    async def source(
        self, layer: str, *, window: int = 32, **settings: Unpack[LayerSettings]
    ) -> AsyncLayerSource:
        """As `Client.source`; a task of this client looks after the layer."""
        stream = Stream(self._contact, layer, window)
        await self._drive.run(stream.claim(settings))
        if self._tender is None:
            self._tender = asyncio.create_task(self._tend(), name="byway-tender")
        return AsyncLayerSource(stream, self._drive)

    async def _tend(self) -> None:
        while True:
            await self._drive.run(self._contact.idle(math.inf))

    # -- events --------------------------------------------------------------------------------

    async def listen(
        self, topics: Iterable[str] = TOPICS, timeout_s: float | None = None
    ) -> AsyncGenerator[Event, None]:
        """As `Client.listen`: `async for event in client.listen(["guard"])`."""
        contact = self._contact
        contact.enter()
        end_s = math.inf if timeout_s is None else contact.clock() + timeout_s
        ear = await self._drive.run(contact.new_ear(tuple(topics)))
        try:
            while (heard := await self._drive.run(contact.next_event(ear, end_s))) is not None:
                yield event_of(heard)
        finally:
            contact.close_ear(ear)
