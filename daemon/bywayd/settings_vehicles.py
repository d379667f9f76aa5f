"""
Vehicles as a settings file describes them: one section class per model.

The sections check what can be checked without the planner, with the key beside the message;
the classes of `byway_planning` check again when they are made.
"""

from typing import Annotated, Any, Final, Literal

from pydantic import BaseModel, ConfigDict, Field, ValidationInfo, field_validator

VERTICES_MAX: Final = 32
#: The most that any length, speed or acceleration of a vehicle may be: catches lost units.
SIZE_M_MAX: Final = 100.0

Positive = Annotated[float, Field(gt=0.0, le=SIZE_M_MAX, allow_inf_nan=False)]
NotNegative = Annotated[float, Field(ge=0.0, le=SIZE_M_MAX, allow_inf_nan=False)]
Coordinate = Annotated[float, Field(ge=-SIZE_M_MAX, le=SIZE_M_MAX, allow_inf_nan=False)]
Point = tuple[Coordinate, Coordinate]


class _Vehicle(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)

    model: str
    speed_mps_max: Positive | None = None
    acceleration_mps2_max: Positive | None = None
    deceleration_mps2_max: Positive | None = None
    clearance_m: NotNegative | None = None
    start_overlap_m: NotNegative | None = None

    def arguments(self) -> dict[str, Any]:
        """Keyword arguments for the planning class: what was told; the rest keeps its defaults."""
        return self.model_dump(exclude={"model"}, exclude_none=True)


class _Steered(_Vehicle):
    footprint_m: tuple[Point, ...] = Field(min_length=3, max_length=VERTICES_MAX)
    turn_radius_m_min: Positive | None = None
    wheelbase_m: Positive | None = None
    steer_rad_max: float | None = Field(None, gt=0.0, lt=1.5, validate_default=True)
    lateral_acceleration_mps2_max: Positive | None = None

    @field_validator("footprint_m")
    @classmethod
    def _is_an_outline(cls, corners: tuple[Point, ...]) -> tuple[Point, ...]:
        crossing = _first_crossing(corners)
        if crossing is not None:
            raise ValueError(f"the edges from corner {crossing[0]} and corner {crossing[1]} cross")
        if abs(_area_m2(corners)) < 1e-4:
            raise ValueError("the corners enclose no area")
        return corners

    # On the last field of the three, so that it speaks up together with the other mistakes.
    @field_validator("steer_rad_max")
    @classmethod
    def _says_once_how_it_turns(
        cls, steer_rad_max: float | None, info: ValidationInfo
    ) -> float | None:
        if not {"turn_radius_m_min", "wheelbase_m"} <= info.data.keys():
            return steer_rad_max  # one of them is wrong in itself
        radius, wheelbase = info.data["turn_radius_m_min"], info.data["wheelbase_m"]
        by_steering = [wheelbase is not None, steer_rad_max is not None]
        if (radius is not None and any(by_steering)) or (radius is None and not all(by_steering)):
            raise ValueError(
                "how does it turn? give turn_radius_m_min, or wheelbase_m and steer_rad_max"
            )
        return steer_rad_max


class CarSection(_Steered):
    model: Literal["car"]
    reverse_speed_mps_max: Positive | None = None
    reverse_factor: float | None = Field(None, ge=1.0, le=1000.0)
    direction_change_m: float | None = Field(None, ge=0.0, le=1000.0)


class ForwardCarSection(_Steered):
    model: Literal["forward_car"]


class DiscSection(_Vehicle):
    model: Literal["disc"]
    radius_m: Positive


VehicleSection = CarSection | ForwardCarSection | DiscSection
VEHICLE_MODELS: Final[dict[str, type[VehicleSection]]] = {
    "car": CarSection,
    "forward_car": ForwardCarSection,
    "disc": DiscSection,
}


def _area_m2(corners: tuple[Point, ...]) -> float:
    nexts = (*corners[1:], corners[0])
    return 0.5 * sum(ax * by - bx * ay for (ax, ay), (bx, by) in zip(corners, nexts, strict=True))


def _first_crossing(corners: tuple[Point, ...]) -> tuple[int, int] | None:
    """Two edges that are not neighbours and touch, by the index of their first corners."""
    count = len(corners)
    for i in range(count):
        for j in range(i + 2, count):
            if (j + 1) % count == i:
                continue
            if _touch(corners[i], corners[i + 1], corners[j], corners[(j + 1) % count]):
                return i, j
    return None


def _touch(a: Point, b: Point, c: Point, d: Point) -> bool:
    def side(p: Point, q: Point, r: Point) -> float:
        return (q[0] - p[0]) * (r[1] - p[1]) - (q[1] - p[1]) * (r[0] - p[0])

    def between(p: Point, q: Point, r: Point) -> bool:
        return min(p[0], q[0]) <= r[0] <= max(p[0], q[0]) and min(p[1], q[1]) <= r[1] <= max(
            p[1], q[1]
        )

    abc, abd, cda, cdb = side(a, b, c), side(a, b, d), side(c, d, a), side(c, d, b)
    if abc * abd < 0.0 and cda * cdb < 0.0:
        return True
    on_line = ((abc, a, b, c), (abd, a, b, d), (cda, c, d, a), (cdb, c, d, b))
    return any(value == 0.0 and between(p, q, r) for value, p, q, r in on_line)
