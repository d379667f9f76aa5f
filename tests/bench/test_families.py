"""The cases of the benchmark: always the same, with room at both ends, and solvable."""

import pytest

from byway_planning import Outcome, plan, warm
from byway_planning.verify import clearance_m
from bywayd.bench.cases import Case
from bywayd.bench.families_tight import FAMILIES, SEALED, draw
from bywayd.bench.planning import SEED, Sites
from bywayd.bench.vehicles import EVERY, VEHICLES

#: Iterations, which are a second or two; what needs so many is not worth asking every time.
WORK = 200_000
SITES = Sites()


def first_outcome(case: Case, work: int) -> Outcome:
    """Plan until there is a route, or so much work is done."""
    is_over: list[Outcome] = []
    _, snapshot = SITES.of(case)
    return plan(
        snapshot,
        case.vehicle,
        case.start,
        case.goal,
        time_left=lambda: 0.0 if is_over else 1.0,
        seed=SEED,
        on_better=is_over.append,
        work_max=work,
    )


def room_m(case: Case) -> float:
    """How near the nearest obstacle is, at the start or at the goal."""
    solids = SITES.of(case)[1].solids()
    return min(
        clearance_m(solids, case.vehicle, pose).distance_m for pose in (case.start, case.goal)
    )


@pytest.fixture(scope="module", autouse=True)
def _warm() -> None:
    warm()


@pytest.mark.parametrize("family", FAMILIES)
def test_a_case_is_the_same_whenever_it_is_drawn(family: str) -> None:
    once, again = draw(family, 1, 3), draw(family, 1, 3)
    assert once.to_bytes() == again.to_bytes()
    others = [draw(family, 2, 3), draw(family, 1, 4)]
    assert len({case.digest() for case in (once, *others)}) == 3


@pytest.mark.parametrize("family", [name for name in FAMILIES if name != SEALED])
@pytest.mark.parametrize(("salt", "number"), [(1, 0), (1, 1), (7, 2)])
def test_a_case_has_room_at_both_ends_and_a_route(family: str, salt: int, number: int) -> None:
    case = draw(family, salt, number)
    assert room_m(case) > 0.03
    assert first_outcome(case, WORK).kind == "route"


@pytest.mark.parametrize("number", range(10))
def test_a_sealed_goal_has_room_and_never_gets_a_route(number: int) -> None:
    case = draw(SEALED, 1, number)
    assert room_m(case) > 0.03
    assert first_outcome(case, 3000).kind in ("no_route", "not_found")


def test_every_vehicle_is_asked_for() -> None:
    drawn = {draw("open", 1, number).vehicle_name for number in range(len(EVERY))}
    assert drawn == set(EVERY) == set(VEHICLES)


def test_clutter_comes_as_cells_too() -> None:
    grounds = [draw("clutter", 1, number).ground for number in range(3)]
    assert [ground.cells is None for ground in grounds] == [True, True, False]
    assert len(grounds[0].polygons) + len(grounds[0].discs) == 400
    cells = grounds[2].cells
    assert cells is not None
    # four hundred things of some 0.4 x 0.4 m are some sixteen cells each
    assert 400 * 6 < int(cells.sum()) < 400 * 30


def test_neighbours_on_a_large_site_share_it() -> None:
    one, two, far = (draw("big", 1, number) for number in (0, 15, 16))
    assert one.ground.to_bytes() == two.ground.to_bytes() != far.ground.to_bytes()
    assert len(one.ground.polygons) > 500
