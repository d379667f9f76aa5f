"""
The brick and timber yard of the demo: what stands where, and who drives which rounds.

All of it is invented. Metres from the south-west corner of the ground, x east, y north. Aisles
are eight metres and wider, so that the widest vehicle passes a pack of timber set down in the
middle of one, and two vehicles pass each other.
"""

import math
from dataclasses import dataclass
from typing import Final

from bywayd.yard.shapes import Mass, Pose, as_points

LIMITS_M: Final = (0.0, 0.0, 80.0, 60.0)

BUILDINGS: Final = (
    Mass("kiln-1", as_points([(5, 44), (16, 44), (16, 55), (5, 55)])),
    Mass("kiln-2", as_points([(20, 46), (31, 46), (31, 55), (20, 55)])),
    Mass("chimney", as_points([(18, 57.5)]), 0.9),
    Mass("shed-1", as_points([(20, 30), (46, 30), (46, 36), (20, 36)])),
    Mass("shed-2", as_points([(20, 16), (46, 16), (46, 22), (20, 22)])),
    Mass("saw-house", as_points([(58, 40), (74, 40), (74, 55), (67, 55), (67, 46), (58, 46)])),
    Mass("ramp", as_points([(52, 0), (78, 0), (78, 5), (52, 5)])),
    Mass("gatehouse", as_points([(3, 3), (10, 3), (10, 7), (3, 7)])),
    Mass("sorting", as_points([(60, 32.5), (72, 32.5), (72, 35.5), (60, 35.5)])),
    Mass("post-1", as_points([(18.6, 29.6)]), 0.2),
    Mass("post-2", as_points([(18.6, 36.4)]), 0.2),
    Mass("post-3", as_points([(47.4, 15.6)]), 0.2),
    Mass("post-4", as_points([(47.4, 36.4)]), 0.2),
)

#: Timber and bricks that stay where they are during a run.
STACKS: Final = (
    Mass("timber-1", as_points([(59, 19), (71, 19), (71, 21.5), (59, 21.5)])),
    Mass("timber-2", as_points([(59, 25.5), (64.5, 25.5), (64.5, 28), (59, 28)])),
    Mass("timber-3", as_points([(68, 25.5), (75, 25.5), (75, 28), (68, 28)])),
    Mass("bricks-1", as_points([(3, 21), (7, 21), (7, 26), (3, 26)])),
    Mass("bricks-2", as_points([(3, 29), (7, 29), (7, 36), (3, 36)])),
    Mass("bricks-3", as_points([(36, 3), (46, 3), (46, 5.5), (36, 5.5)])),
    Mass("poles", as_points([(36, 50), (47, 47.5), (47.6, 50), (36.6, 52.5)])),
)

#: A pack of timber that the crane sets down in the way, and takes away again.
PACK_LENGTH_M: Final = 2.6
PACK_WIDTH_M: Final = 1.2
#: A pallet that somebody leaves standing. Nobody tells the daemon: it has to be seen.
PALLET_LENGTH_M: Final = 1.2
PALLET_WIDTH_M: Final = 1.0
#: The vehicle that has a range sensor on its nose.
SENSOR_ON: Final = "tug-3"

#: The round of the fork truck that a person drives: around timber-2 and timber-3.
TRUCK_CORNERS: Final = ((51.5, 29.9), (51.5, 23.4), (77.2, 23.4), (77.2, 29.9))
TRUCK_CORNER_M: Final = 2.2

NORTH: Final = math.pi / 2
WEST: Final = math.pi
SOUTH: Final = -math.pi / 2
EAST: Final = 0.0


@dataclass(frozen=True)
class Station:
    """A place where a vehicle stands to load or unload: the pose of its rear axle."""

    name: str
    pose: Pose


@dataclass(frozen=True)
class Round:
    """
    The day of one unit.

    It begins loaded, on its way to where the first delivery is unloaded. `deliveries` are pairs
    of stations, load and unload, driven one after the other and then from the beginning again.
    No two units share a station, so a goal is never taken for long.
    """

    unit: str
    vehicle: str
    rank: int  # who gives way in a stand-off: the higher number
    begins: Pose
    deliveries: tuple[tuple[Station, Station], ...]

    @property
    def stations(self) -> tuple[Station, ...]:
        """Every station of the round, in the order of the first drive."""
        return tuple(station for delivery in self.deliveries for station in delivery)


_SHED_2_SOUTH: Final = Station("shed-2 south", (35.0, 13.4, EAST))

ROUNDS: Final = (
    Round(
        *("flatbed-1", "flatbed", 0, (46.0, 11.5, EAST)),
        (
            (_SHED_2_SOUTH, Station("ramp 1", (58.0, 7.2, NORTH))),
            (_SHED_2_SOUTH, Station("ramp 2", (68.0, 7.2, NORTH))),
        ),
    ),
    Round(
        *("loader-2", "loader", 1, (51.0, 40.5, EAST)),
        (
            (Station("shed-2 east", (50.6, 19.0, WEST)), Station("saw front", (61.5, 37.9, EAST))),
            (Station("timber 2", (54.9, 26.8, EAST)), Station("timber 1", (63.0, 14.4, NORTH))),
        ),
    ),
    Round(
        *("tug-3", "tug", 2, (41.0, 39.5, EAST)),
        (
            (Station("kiln-2", (25.5, 42.4, NORTH)), Station("sorting", (56.6, 34.0, EAST))),
            (Station("poles", (50.4, 48.9, WEST)), Station("shed-1 north", (38.0, 38.0, WEST))),
        ),
    ),
)

#: Corners out of everybody's way, for a unit that has waited too long.
ASIDE: Final = (
    Station("aside west", (14.0, 11.0, EAST)),
    Station("aside south", (26.0, 9.0, EAST)),
    Station("aside aisle", (33.0, 26.0, EAST)),
    Station("aside lane", (36.0, 41.0, EAST)),
    Station("aside north", (55.0, 54.0, SOUTH)),
    Station("aside east", (76.5, 12.0, NORTH)),
)
