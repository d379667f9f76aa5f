"""From the acknowledgement of a change to the alert that a guarded route is blocked by it."""

import threading
import time
from typing import Any, Final, Protocol

import byway
from bywayd.bench.cases import Rng
from bywayd.bench.figures import MS, Figures, spread
from bywayd.bench.growth import ROUTE_M, TRIES_MAX, pair

VEHICLE: Final = "shunter"
BUDGET_S: Final = 0.3
#: An alert that is this late is not waited for.
LOST_S: Final = 2.0
#: A guard is not lost while others are measured.
SILENCE_S: Final = 120.0
LAYER: Final = "in-the-way"


class _Listener(threading.Thread):
    """Notes when events about guarded routes arrive, by unit and kind."""

    def __init__(self, endpoint: str) -> None:
        super().__init__(daemon=True)
        self._endpoint = endpoint
        self._ending = threading.Event()
        self._news = threading.Condition()
        self._arrived: dict[tuple[str, str], float] = {}

    def run(self) -> None:
        with byway.Client(self._endpoint) as client:
            for event in client.listen(("guard", "health")):  # health comes once a second
                if self._ending.is_set():
                    return
                at_s = time.perf_counter()
                with self._news:
                    unit = event.topic.removeprefix("guard.")
                    self._arrived[unit, event.content.kind] = at_s
                    self._news.notify_all()

    def wait(self, unit: str, kind: str, since_s: float) -> float | None:
        """Return when an event came that is younger than `since_s`; None if none comes."""
        end_s = time.perf_counter() + LOST_S
        with self._news:
            while (at_s := self._arrived.get((unit, kind), 0.0)) < since_s:
                left_s = end_s - time.perf_counter()
                if left_s <= 0.0 or not self._news.wait(left_s):
                    return None
        return at_s

    def end(self) -> None:
        self._ending.set()
        self.join()


class AlertSizes(Protocol):
    """How much is measured."""

    @property
    def guards(self) -> int: ...

    @property
    def alerts(self) -> int: ...


def alerts(endpoint: str, rng: Rng, side_m: float, sizes: AlertSizes) -> Figures:
    """
    Guard routes of about 100 m, put crates on them, and see when the alerts come.

    Returns:
        Milliseconds from the acknowledgement of a crate to the alert that names its unit (0 where
        the alert was there first), and from sending it; how many alerts did not come.
    """
    listener = _Listener(endpoint)
    after_s: list[float] = []
    sent_s: list[float] = []
    missed = 0
    with byway.Client(endpoint) as driver, byway.Client(endpoint) as source:
        routes = _guarded(driver, rng, side_m, sizes.guards)
        listener.start()
        listener.wait("health", "health_is", 0.0)
        source.replace_layer(LAYER)
        for i in range(sizes.alerts):
            unit = f"guarded-{i % len(routes)}"
            table = routes[i % len(routes)]
            row = table[int(rng.integers(len(table) // 4, len(table) - 1))]
            before_s = time.perf_counter()
            source.put(LAYER, polygons={"crate": _crate(float(row["x_m"]), float(row["y_m"]))})
            acknowledged_s = time.perf_counter()
            came_s = listener.wait(unit, "alert", before_s)
            if came_s is None:
                missed += 1
            else:
                after_s.append(max(0.0, came_s - acknowledged_s))
                sent_s.append(came_s - before_s)
            gone_s = time.perf_counter()
            source.drop(LAYER, ["crate"])
            listener.wait(unit, "cleared", gone_s)
            for k in range(len(routes)):
                driver.progress(0.0, unit=f"guarded-{k}")
        for k in range(len(routes)):
            driver.release(unit=f"guarded-{k}")
    listener.end()
    return {
        "guards": len(routes),
        "alert_ms": spread(after_s, MS),
        "alert_from_sending_ms": spread(sent_s, MS),
        "alerts_missed": missed,
    }


def _guarded(client: byway.Client, rng: Rng, side_m: float, count: int) -> list[Any]:
    """Ask for routes of about the length wanted, and guard them."""
    tables: list[Any] = []
    for _ in range(TRIES_MAX):
        if len(tables) == count:
            return tables
        start, goal = pair(rng, side_m)
        answer = client.replan(
            VEHICLE, start, goal, BUDGET_S, unit=f"guarded-{len(tables)}", gap_wanted=0.95
        )
        if answer.route is not None and 0.9 * ROUTE_M < answer.route.length_m < 1.3 * ROUTE_M:
            client.guard(answer, silence_s=SILENCE_S)
            tables.append(answer.route.table)
    raise RuntimeError(f"{len(tables)} routes to guard, {count} wanted")


def _crate(x: float, y: float) -> list[tuple[float, float]]:
    return [(x - 0.5, y - 0.5), (x + 0.5, y - 0.5), (x + 0.5, y + 0.5), (x - 0.5, y + 0.5)]
