"""
Families where the vehicle only just fits, goals that cannot be reached, and the list of all.
"""

import math
from collections.abc import Mapping
from dataclasses import replace
from typing import Final

from bywayd.bench.cases import (
    Case,
    Family,
    Lot,
    Pose,
    Rng,
    Size,
    Yard,
    pose_from_middle,
    row_of_packs,
)
from bywayd.bench.families import big, clutter, maze, open_yard, stacks, trap
from bywayd.bench.vehicles import EVERY, FORWARD, REVERSING

QUARTER: Final = 0.5 * math.pi
#: What a gate is wider than the vehicle.
GATE_SLACK_M: Final = 0.2


def _aisle(rng: Rng, size: Size) -> tuple[Yard, float, float]:
    """A yard with an aisle along x, stacks below it; returns where the aisle begins and ends."""
    aisle_m = max(1.15 * size.turn_width_m, size.length_m + 1.0) * float(rng.uniform(1.0, 1.3))
    deep_m = size.length_m + 0.6
    yard = Yard(9.0 * size.length_m, 2.0 + aisle_m + deep_m)
    row_of_packs(rng, yard, 0.0, yard.width_m, 0.3, 2.0)
    return yard, 2.0, 2.0 + aisle_m


def _bay(rng: Rng, size: Size, slack_m: float) -> tuple[Yard, Pose, float]:
    """An aisle with a bay between stacks above it: yard, pose in the bay, middle of the aisle."""
    yard, low, high = _aisle(rng, size)
    x = 0.5 * yard.width_m
    half_m = 0.5 * (size.width_m + slack_m)
    row_of_packs(rng, yard, 0.0, x - half_m - 0.3, high, yard.height_m)
    row_of_packs(rng, yard, x + half_m + 0.3, yard.width_m, high, yard.height_m)
    for side in (-1.0, 1.0):  # the bay's own posts stand exactly
        yard.block(x + side * (half_m + 0.15), high + 0.5 * size.length_m, 0.3, size.length_m)
    rear_in = rng.uniform() < 0.7
    heading_rad = (-QUARTER if rear_in else QUARTER) + float(rng.uniform(-0.01, 0.01))
    y = high + 0.5 * size.length_m + float(rng.uniform(0.0, 0.25))
    return yard, pose_from_middle(x, y, heading_rad, size), 0.5 * (low + high)


def _along(rng: Rng, size: Size, x: float, y: float, headings: tuple[float, ...]) -> Pose:
    heading_rad = float(rng.choice(headings)) + float(rng.uniform(-0.05, 0.05))
    return pose_from_middle(x, y, heading_rad, size)


def bay(lot: Lot) -> Case:
    """Out of an aisle into a bay between stacks, mostly rear end first."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(REVERSING)
    yard, goal, middle = _bay(rng, size, float(rng.uniform(0.5, 0.9)))
    away_m = float(rng.choice([-1.0, 1.0])) * float(rng.uniform(1.2, 3.0)) * size.length_m
    start = _along(rng, size, 0.5 * yard.width_m + away_m, middle, (0.0, math.pi))
    return lot.case(vehicle, start, goal, yard.ground())


def _one_sweep_m(size: Size) -> float:
    """What a slot must be longer than the vehicle for entering it in one sweep."""
    half_m = 0.5 * size.width_m
    outer_m = math.hypot(size.radius_m + half_m, size.front_m)
    return math.sqrt(outer_m**2 - (size.radius_m - half_m) ** 2) - size.front_m


def _slot(rng: Rng, size: Size, slack_m: float) -> tuple[Yard, Pose, float]:
    """A road with trailers along the kerb: yard, pose in the slot between two, middle of road."""
    deep_m = size.width_m + 0.7
    road_m = max(1.1 * size.length_m, size.width_m + 2.5) * float(rng.uniform(1.0, 1.4))
    yard = Yard(9.0 * size.length_m, 0.3 + deep_m + road_m + 1.5)
    x, half_m = 0.5 * yard.width_m, 0.5 * (size.length_m + slack_m)
    yard.span(0.0, 0.0, yard.width_m, 0.3)
    row_of_packs(rng, yard, 0.0, yard.width_m, yard.height_m - 1.4, yard.height_m)
    for side in (-1.0, 1.0):
        for i in range(2):
            middle = x + side * (half_m + (i + 0.5) * size.length_m + i * 0.8)
            yard.block(middle, 0.3 + 0.5 * deep_m, size.length_m, size.width_m)
    off_m = float(rng.uniform(-0.2, 0.2)) * (half_m - 0.5 * size.length_m)
    y = 0.3 + 0.5 * deep_m + float(rng.uniform(-0.05, 0.05))
    pose = pose_from_middle(x + off_m, y, float(rng.uniform(-0.01, 0.01)), size)
    return yard, pose, 0.3 + deep_m + 0.5 * road_m


def kerb(lot: Lot) -> Case:
    """Into a slot along a kerb, between two trailers."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(REVERSING)
    yard, goal, middle = _slot(rng, size, 0.3 + _one_sweep_m(size) * float(rng.uniform(1.2, 1.8)))
    away_m = float(rng.choice([-1.0, 1.0])) * float(rng.uniform(1.0, 3.0)) * size.length_m
    start = _along(rng, size, 0.5 * yard.width_m + away_m, middle, (0.0,))
    return lot.case(vehicle, start, goal, yard.ground())


def _gate(lot: Lot, names: tuple[str, ...], turned_rad: float) -> Case:
    rng = lot.rng()
    vehicle, size = lot.vehicle(names)
    before_m = size.length_m + (1.5 if size.reverses else 3.0) * size.radius_m
    thick_m = float(rng.uniform(0.3, 1.5))
    yard = Yard(2.0 * before_m + 20.0, 24.0 + 5.0 * size.radius_m)
    x = 0.5 * yard.width_m
    at = float(rng.uniform(0.3, 0.7)) * yard.height_m
    half_m = 0.5 * (size.width_m + GATE_SLACK_M)
    yard.span(x - 0.5 * thick_m, 0.0, x + 0.5 * thick_m, at - half_m)
    yard.span(x - 0.5 * thick_m, at + half_m, x + 0.5 * thick_m, yard.height_m)

    def pose_at(side: float) -> Pose:
        away_m = before_m + float(rng.uniform(0.0, 8.0)) - size.length_m
        margin_m = size.length_m + (1.0 if size.reverses else size.radius_m)
        y = float(rng.uniform(margin_m, yard.height_m - margin_m))
        return (x + side * away_m, y, float(rng.uniform(-turned_rad, turned_rad)))

    start, goal = pose_at(-1.0), pose_at(1.0)
    for pose in (start, goal):
        yard.keep_free(pose, size, lead_m=2.0 + size.radius_m)
    for _ in range(8):
        px, py = float(rng.uniform(0.0, yard.width_m)), float(rng.uniform(0.0, yard.height_m))
        if abs(px - x) > before_m:  # the approach to the gate stays free
            yard.block(px, py, 2.4, 1.2, float(rng.uniform(0.0, math.pi)), loose=True)
    return lot.case(vehicle, start, goal, yard.ground())


def gate(lot: Lot) -> Case:
    """Through a gate in a fence, hardly wider than the vehicle."""
    return _gate(lot, REVERSING, math.pi)


def gate_forward(lot: Lot) -> Case:
    """The same for vehicles that cannot reverse."""
    return _gate(lot, FORWARD, 1.2)


def tight_start(lot: Lot) -> Case:
    """Out of a bay or a slot that is hardly larger than the vehicle, and away."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(REVERSING)
    if rng.uniform() < 0.5:
        yard, start, middle = _bay(rng, size, float(rng.uniform(0.4, 0.6)))
    else:
        yard, start, middle = _slot(
            rng, size, 0.2 + _one_sweep_m(size) * float(rng.uniform(0.9, 1.1))
        )
    away_m = float(rng.choice([-1.0, 1.0])) * float(rng.uniform(2.5, 3.8)) * size.length_m
    goal = _along(rng, size, 0.5 * yard.width_m + away_m, middle, (0.0, math.pi))
    return lot.case(vehicle, start, goal, yard.ground())


def u_turn(lot: Lot) -> Case:
    """Turn round in an aisle that is too narrow for doing it in one go."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(REVERSING)
    narrow_m, wide_m = size.length_m + 0.7, 2.0 * size.radius_m + size.width_m - 0.2
    aisle_m = float(rng.uniform(narrow_m, max(narrow_m, wide_m)))
    yard = Yard(9.0 * size.length_m, aisle_m + 4.0)
    row_of_packs(rng, yard, 0.0, yard.width_m, 0.3, 2.0)
    row_of_packs(rng, yard, 0.0, yard.width_m, 2.0 + aisle_m, 3.7 + aisle_m)
    slack_m = 0.5 * (aisle_m - size.width_m) - 0.3
    x = 0.5 * yard.width_m
    poses = [
        pose_from_middle(
            x + size.length_m * float(rng.uniform(-1.5, 1.5)),
            2.0 + 0.5 * aisle_m + slack_m * float(rng.uniform(-0.8, 0.8)),
            heading_rad + float(rng.uniform(-0.03, 0.03)),
            size,
        )
        for heading_rad in (0.0, math.pi)
    ]
    return lot.case(vehicle, poses[0], poses[1], yard.ground())


def sealed(lot: Lot) -> Case:
    """No way to the goal: a pen without a gate, a fence across the yard, or a gap too narrow."""
    rng = lot.rng()
    vehicle, size = lot.vehicle(EVERY)
    stretch = max(1.0, size.length_m / 5.0)
    yard = Yard(64.0 * stretch, 44.0 * stretch)
    kind = int(rng.integers(3))
    fence = 0.62 * yard.width_m
    gap_m = size.width_m * float(rng.uniform(0.3, 0.8)) if kind == 2 else 0.0
    at = float(rng.uniform(0.3, 0.7)) * yard.height_m
    margin_m = size.length_m + 4.0 + size.radius_m
    if kind == 0:
        x0, x1 = fence, yard.width_m - 3.0
        y0, y1 = 3.0, yard.height_m - 3.0
        yard.span(x0, y0, x1, y0 + 0.4)
        yard.span(x0, y1 - 0.4, x1, y1)
        yard.span(x0, y0, x0 + 0.4, y1)
        yard.span(x1 - 0.4, y0, x1, y1)
    else:
        yard.span(fence, 0.0, fence + 0.4, at - 0.5 * gap_m)
        yard.span(fence, at + 0.5 * gap_m, fence + 0.4, yard.height_m)
    goal_x = 0.5 * (fence + yard.width_m)
    y_low, y_high = margin_m, yard.height_m - margin_m
    start = (
        float(rng.uniform(margin_m, fence - margin_m)),
        float(rng.uniform(y_low, y_high)),
        float(rng.uniform(-math.pi, math.pi)),
    )
    goal = (goal_x, float(rng.uniform(y_low, y_high)), float(rng.uniform(-math.pi, math.pi)))
    for pose in (start, goal):
        yard.keep_free(pose, size, lead_m=1.0)
    for _ in range(10):
        px, py = float(rng.uniform(0.0, yard.width_m)), float(rng.uniform(0.0, yard.height_m))
        yard.block(px, py, 2.4, 1.2, float(rng.uniform(0.0, math.pi)), loose=True)
    return replace(lot.case(vehicle, start, goal, yard.ground()), sealed=True)


#: The family of cases without a route.
SEALED: Final = "sealed"

#: In the order of the tables.
FAMILIES: Final[Mapping[str, Family]] = {
    "open": open_yard,
    "stacks": stacks,
    "bay": bay,
    "kerb": kerb,
    "gate": gate,
    "gate_forward": gate_forward,
    "maze": maze,
    "trap": trap,
    "big": big,
    "clutter": clutter,
    "tight_start": tight_start,
    "u_turn": u_turn,
    SEALED: sealed,
}


def draw(family: str, salt: int, number: int) -> Case:
    """Return one case of a family: always the same for the same three."""
    return FAMILIES[family](Lot(family, salt, number))
