"""
The yard's crane: sets packs of timber down in the way of vehicles, and takes them away again.

Now and then it is somebody who leaves a pallet in the way of the vehicle with the range sensor;
of that the daemon is not told.

It puts a pack only where no vehicle can be before it has seen it, where the widest vehicle still
gets past, and not in front of a station.
"""

import math
import random
from collections.abc import Sequence
from dataclasses import replace
from typing import Final

from bywayd.outlines import Points, placed
from bywayd.yard.claims import Ground
from bywayd.yard.scene import (
    BUILDINGS,
    PACK_LENGTH_M,
    PACK_WIDTH_M,
    PALLET_LENGTH_M,
    PALLET_WIDTH_M,
    SENSOR_ON,
    STACKS,
)
from bywayd.yard.shapes import Mass, Masses, distance_m, rectangle
from bywayd.yard.unit import Pack, Unit

FIRST_S: Final = 2.0
EVERY_S: Final = (1.5, 3.5)
#: After no place was found.
AGAIN_S: Final = 0.4
STAYS_S: Final = (9.0, 15.0)
PACKS_MAX: Final = 3
#: Of what is put in the way of the vehicle with the sensor.
PALLETS_RATIO: Final = 0.6
#: The widest vehicle is 2.3 m wide and keeps 0.15 m on either side; it needs room to turn as well.
PASSAGE_M: Final = 3.0
PACK_SIZE_M: Final = (PACK_LENGTH_M, PACK_WIDTH_M)
CLAIM_GAP_M: Final = 2.0
STATION_GAP_M: Final = 2.0
PACKS_GAP_M: Final = 7.0
#: How far along its route a vehicle finds the pack, so that it notices well before it must stop.
AHEAD_M: Final = 7.5


class Crane:
    """Owned by the world's loop. `packs` is what stands on the yard now."""

    def __init__(self, units: Sequence[Unit], stations_m: Sequence[Points], seed: int) -> None:
        self.packs: list[Pack] = []
        self.put_down = 0
        self.pallets = 0
        self._units = units
        self._stations_m = stations_m
        self._dice = random.Random(seed)
        self._fixed = Masses((*BUILDINGS, *STACKS))
        self._next_s = FIRST_S

    def step(self, ground: Ground, now_s: float) -> tuple[list[Pack], list[Pack]]:
        """Return what was put down and what was taken away in this step."""
        gone = [pack for pack in self.packs if now_s >= pack.gone_s]
        put: list[Pack] = []
        if now_s >= self._next_s and len(self.packs) < PACKS_MAX:
            pack = self._found_place(ground, now_s)
            self._next_s = now_s + AGAIN_S
            if pack is not None:
                self._next_s = now_s + self._dice.uniform(*EVERY_S)
                put.append(pack)
        if gone or put:
            self.packs = [pack for pack in self.packs if pack not in gone] + put
        return put, gone

    def tell(self, name: str) -> Mass | None:
        """Note that the daemon is told of what nobody has told it of; returns that."""
        for k, pack in enumerate(self.packs):
            if pack.mass.name == name and not pack.is_told:
                self.packs[k] = replace(pack, is_told=True)
                return pack.mass
        return None

    def _found_place(self, ground: Ground, now_s: float) -> Pack | None:
        """Return something that lies in the way of a vehicle, or None if it could nowhere now."""
        for unit in self._dice.sample(list(self._units), len(self._units)):
            line = unit.driver.line
            if line is None or line.length_m < unit.driver.at_m + AHEAD_M:
                continue
            for at_m in line.places(unit.driver.at_m + AHEAD_M, line.length_m, 1.0):
                x_m, y_m, _ = line.pose_at(at_m)
                turn_rad = self._dice.uniform(-math.pi, math.pi)
                is_pallet = unit.name == SENSOR_ON and self._dice.random() < PALLETS_RATIO
                size_m = (PALLET_LENGTH_M, PALLET_WIDTH_M) if is_pallet else PACK_SIZE_M
                ring_m = rectangle(x_m, y_m, *size_m, turn_rad)
                if self._may_lie(ring_m, ground):
                    self.put_down += 1
                    self.pallets += is_pallet
                    name = f"{'pallet' if is_pallet else 'pack'}-{self.put_down}"
                    gone_s = now_s + self._dice.uniform(*STAYS_S)
                    return Pack(Mass(name, ring_m), gone_s, is_told=not is_pallet)
        return None

    def _may_lie(self, ring_m: Points, ground: Ground) -> bool:
        away_from_packs = all(
            distance_m(ring_m, pack.mass.ring_m) > PACKS_GAP_M for pack in self.packs
        )
        return (
            away_from_packs
            and ground.clear_of_all(ring_m, CLAIM_GAP_M)
            and self._fixed.nearest(ring_m, PASSAGE_M)[0] >= PASSAGE_M
            and all(distance_m(ring_m, station) > STATION_GAP_M for station in self._stations_m)
        )


def stations_m(units: Sequence[Unit]) -> list[Points]:
    """Return the outlines of all units at all their stations."""
    return [
        placed(unit.driver.outline_m, station.pose) for unit in units for station in unit.stations
    ]
