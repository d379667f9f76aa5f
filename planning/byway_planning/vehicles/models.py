"""
The vehicles that Byway knows: `Car`, `ForwardCar`, `Disc`.

Frozen values: checked when made, equal when their fields are equal, and written as plain
dictionaries to travel between processes. x is forward, y left, the origin is the middle of
the rear axle (the centre for a disc).
"""

import difflib
import math
from abc import ABC, abstractmethod
from collections.abc import Mapping, Sequence
from dataclasses import MISSING, dataclass, fields, replace
from functools import lru_cache
from typing import Any, ClassVar, Final, Literal, Self

import numpy as np
import numpy.typing as npt

from byway_planning.vehicles import footprint
from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR, Body, Limits

Points = npt.NDArray[np.float64]
Footprint = Sequence[Sequence[float]]  # kept as a tuple of pairs, so that vehicles can be hashed

#: Corners of the polygon drawn around a disc.
DISC_CORNERS: Final = 32


@dataclass(frozen=True, kw_only=True)
class _Common(ABC):
    """What every vehicle has; not a vehicle by itself."""

    model: ClassVar[str]
    kind: ClassVar[int]
    cost_unit: ClassVar[Literal["m"]] = "m"

    speed_mps_max: float = 3.0
    acceleration_mps2_max: float = 1.0
    deceleration_mps2_max: float = 1.5
    clearance_m: float = 0.1
    start_overlap_m: float = 0.05

    def __post_init__(self) -> None:
        for name in ("speed_mps_max", "acceleration_mps2_max", "deceleration_mps2_max"):
            self._number(name, above=0.0)
        self._number("clearance_m", least=0.0)
        self._number("start_overlap_m", least=0.0)

    def _number(self, name: str, above: float | None = None, least: float | None = None) -> None:
        """Check a field and keep it as a float."""
        value = getattr(self, name)
        wanted = "a finite number" + (f" above {above:g}" if above is not None else "")
        wanted += f", at least {least:g}" if least is not None else ""
        try:
            good = not isinstance(value, bool | str) and math.isfinite(value)
        except TypeError:
            good = False
        if not good or (above is not None and value <= above):
            raise ValueError(f"{name} must be {wanted}, got {value!r}")
        if least is not None and value < least:
            raise ValueError(f"{name} must be {wanted}, got {value!r}")
        object.__setattr__(self, name, float(value))

    def with_clearance(self, clearance_m: float) -> Self:
        """The same vehicle with another hard clearance."""
        return replace(self, clearance_m=clearance_m)

    def settings(self) -> dict[str, Any]:
        """The vehicle as plain JSON types; `vehicle_from_settings` makes it again."""
        found: dict[str, Any] = {"model": self.model}
        for field in fields(self):
            value = getattr(self, field.name)
            if value is not None:
                found[field.name] = _plain(value)
        return found

    def body(self, clearance_m: float | None = None) -> Body:
        """
        What kernels know of its shape and costs; the same object for the same clearance.

        Raises:
            ValueError: If the clearance is negative or not finite.
        """
        return _body_of(self, self.clearance_m if clearance_m is None else clearance_m)

    @property
    def inner_radius_m(self) -> float:
        """Radius of the largest disc inside the body."""
        return self.body().inner_radius_m

    # What the models differ in.

    @property
    @abstractmethod
    def limits(self) -> Limits:
        """Limits in time."""

    @abstractmethod
    def outline_at(self, pose: Sequence[float]) -> Points:
        """Corners (n, 2) of the body at a pose."""

    @abstractmethod
    def _make_body(self) -> Body: ...


@dataclass(frozen=True, kw_only=True)
class _Wheeled(_Common):
    """What steered vehicles share: an outline and a least turning radius."""

    footprint_m: Footprint
    turn_radius_m_min: float | None = None
    wheelbase_m: float | None = None
    steer_rad_max: float | None = None
    lateral_acceleration_mps2_max: float = 1.5

    def __post_init__(self) -> None:
        super().__post_init__()
        outline = footprint.checked_outline("footprint_m", self.footprint_m)
        object.__setattr__(self, "footprint_m", tuple((x, y) for x, y in outline.tolist()))
        self._number("lateral_acceleration_mps2_max", above=0.0)
        by_radius = self.turn_radius_m_min is not None
        by_axles = self.wheelbase_m is not None or self.steer_rad_max is not None
        if by_radius == by_axles:
            raise ValueError(
                "give either turn_radius_m_min or wheelbase_m with steer_rad_max, got "
                f"turn_radius_m_min={self.turn_radius_m_min}, wheelbase_m={self.wheelbase_m}, "
                f"steer_rad_max={self.steer_rad_max}"
            )
        if by_radius:
            self._number("turn_radius_m_min", above=0.0)
        else:
            self._number("wheelbase_m", above=0.0)
            self._number("steer_rad_max", above=0.0)
            if self.steer_rad_max is not None and self.steer_rad_max >= 0.5 * math.pi:
                raise ValueError(
                    f"steer_rad_max must be below pi / 2, got {self.steer_rad_max}; "
                    "is it in radians?"
                )

    @property
    def turn_radius_m(self) -> float:
        """Least turning radius of the middle of the rear axle."""
        if self.wheelbase_m is not None and self.steer_rad_max is not None:
            return self.wheelbase_m / math.tan(self.steer_rad_max)
        return float(self.turn_radius_m_min or 0.0)  # one or the other is given: checked

    def outline_at(self, pose: Sequence[float]) -> Points:
        """The footprint at a pose x_m, y_m, heading_rad; shape (n, 2), counter-clockwise."""
        c, s = math.cos(pose[2]), math.sin(pose[2])
        turned = np.array(self.footprint_m) @ np.array([[c, s], [-s, c]])
        moved: Points = turned + np.array([pose[0], pose[1]])
        return moved

    def _costs(self) -> tuple[float, float]:
        """(reverse_factor, direction_change_m)"""
        return 1.0, 0.0

    def _make_body(self) -> Body:
        factor, change_m = self._costs()
        # a clearance of its own per replan must not cost the geometry again
        return _shape_of(self.footprint_m)._replace(
            kind=self.kind,
            turn_radius_m=self.turn_radius_m,
            clearance_m=self.clearance_m,
            reverse_factor=factor,
            direction_change_m=change_m,
        )


@dataclass(frozen=True, kw_only=True)
class Car(_Wheeled):
    """
    A vehicle with steered wheels that drives forward and in reverse.

    Give the least turning radius of the middle of the rear axle, or the wheelbase with the
    largest steering angle. A metre in reverse costs `reverse_factor` metres, a change of
    direction `direction_change_m`; with 1 and 0 the cost of a route is its length.

    Raises:
        ValueError: If a value makes no sense; the text names the field and the value.
    """

    model: ClassVar[str] = "car"
    kind: ClassVar[int] = CAR

    reverse_speed_mps_max: float = 1.5
    reverse_factor: float = 1.5
    direction_change_m: float = 2.0

    def __post_init__(self) -> None:
        super().__post_init__()
        self._number("reverse_speed_mps_max", above=0.0)
        self._number("reverse_factor", least=1.0)
        self._number("direction_change_m", least=0.0)

    @property
    def limits(self) -> Limits:
        """Its limits in time."""
        return Limits(
            self.speed_mps_max,
            self.reverse_speed_mps_max,
            self.acceleration_mps2_max,
            self.deceleration_mps2_max,
            self.lateral_acceleration_mps2_max,
        )

    def _costs(self) -> tuple[float, float]:
        return self.reverse_factor, self.direction_change_m


@dataclass(frozen=True, kw_only=True)
class ForwardCar(_Wheeled):
    """
    A vehicle with steered wheels that never drives in reverse; otherwise like `Car`.

    Raises:
        ValueError: If a value makes no sense; the text names the field and the value.
    """

    model: ClassVar[str] = "forward_car"
    kind: ClassVar[int] = FORWARD_CAR

    @property
    def limits(self) -> Limits:
        """Its limits in time; the speed in reverse is 0."""
        return Limits(
            self.speed_mps_max,
            0.0,
            self.acceleration_mps2_max,
            self.deceleration_mps2_max,
            self.lateral_acceleration_mps2_max,
        )


@dataclass(frozen=True, kw_only=True)
class Disc(_Common):
    """
    A round vehicle that drives straight in any direction and stops where it turns.

    Raises:
        ValueError: If a value makes no sense; the text names the field and the value.
    """

    model: ClassVar[str] = "disc"
    kind: ClassVar[int] = DISC

    radius_m: float

    def __post_init__(self) -> None:
        super().__post_init__()
        self._number("radius_m", above=0.0)
        if self.radius_m > footprint.REACH_M_MAX:
            raise ValueError(
                f"radius_m must be at most {footprint.REACH_M_MAX:g}, got {self.radius_m}; "
                "is it in metres?"
            )

    @property
    def limits(self) -> Limits:
        """Its limits in time; it drives no curves, so nothing limits it sideways."""
        return Limits(
            self.speed_mps_max,
            0.0,
            self.acceleration_mps2_max,
            self.deceleration_mps2_max,
            math.inf,
        )

    def outline_at(self, pose: Sequence[float]) -> Points:
        """A polygon around the disc at a pose; shape (32, 2), counter-clockwise."""
        angles = np.arange(DISC_CORNERS) * (2.0 * math.pi / DISC_CORNERS)
        reach_m = self.radius_m / math.cos(math.pi / DISC_CORNERS)
        corners = reach_m * np.column_stack([np.cos(angles), np.sin(angles)])
        moved: Points = corners + np.array([pose[0], pose[1]])
        return moved

    def _make_body(self) -> Body:
        return Body(
            kind=self.kind,
            turn_radius_m=0.0,
            outline_m=_fixed(np.zeros((1, 2))),
            skin_m=self.radius_m,
            cover_m=_fixed(np.array([[0.0, 0.0, self.radius_m]])),
            outer_x_m=0.0,
            outer_y_m=0.0,
            outer_radius_m=self.radius_m,
            inner_x_m=0.0,
            inner_y_m=0.0,
            inner_radius_m=self.radius_m,
            clearance_m=self.clearance_m,
            reverse_factor=1.0,
            direction_change_m=0.0,
        )


Vehicle = Car | ForwardCar | Disc

MODELS: Final[Mapping[str, type[Car] | type[ForwardCar] | type[Disc]]] = {
    model.model: model for model in (Car, ForwardCar, Disc)
}


def vehicle_from_settings(settings: Mapping[str, Any]) -> Vehicle:
    """
    Make a vehicle from plain types: "model" ("car", "forward_car" or "disc") and its fields.

    Raises:
        ValueError: If a key is unknown or missing, or a value makes no sense. The text names
            the key.
    """
    name = settings.get("model")
    if not isinstance(name, str) or name not in MODELS:
        raise ValueError(f"model must be one of {', '.join(MODELS)}, got {name!r}")
    model = MODELS[name]
    known = {field.name: field for field in fields(model)}
    for key in settings:
        if key != "model" and key not in known:
            near = difflib.get_close_matches(str(key), known, n=1)
            hint = f"; did you mean {near[0]}?" if near else ""
            raise ValueError(f"{key} is not a setting of a {name}{hint}")
    for key, field in known.items():
        if field.default is MISSING and key not in settings:
            raise ValueError(f"{key} is missing; a {name} needs it")
    return model(**{str(key): value for key, value in settings.items() if key != "model"})


@lru_cache(maxsize=256)
def _body_of(vehicle: _Common, clearance_m: float) -> Body:
    if not 0.0 <= clearance_m < math.inf:
        raise ValueError(f"clearance_m must be a finite number, at least 0, got {clearance_m!r}")
    return vehicle._make_body()._replace(clearance_m=float(clearance_m))


@lru_cache(maxsize=256)
def _shape_of(outline_m: Footprint) -> Body:
    """The geometry of a body; the rest of its fields is for the vehicle to fill in."""
    outline = np.array(outline_m)
    outer = footprint.smallest_disc_around(outline)
    inner = footprint.largest_disc_inside(outline)
    return Body(
        kind=CAR,
        turn_radius_m=0.0,
        outline_m=_fixed(outline),
        skin_m=0.0,
        cover_m=_fixed(footprint.cover_discs(outline, inner[2])),
        outer_x_m=outer[0],
        outer_y_m=outer[1],
        outer_radius_m=outer[2],
        inner_x_m=inner[0],
        inner_y_m=inner[1],
        inner_radius_m=inner[2],
        clearance_m=0.0,
        reverse_factor=1.0,
        direction_change_m=0.0,
    )


def _fixed(values: Points) -> Points:
    kept = np.ascontiguousarray(values, np.float64)
    kept.flags.writeable = False
    return kept


def _plain(value: Any) -> Any:
    return [list(vertex) for vertex in value] if isinstance(value, tuple) else value
