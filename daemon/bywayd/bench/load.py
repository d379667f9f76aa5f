"""Replans one after the other and many at once: how many a second, and how many in time."""

import time
from collections import Counter, deque
from collections.abc import Sequence
from typing import Final

import byway
from bywayd.bench.cases import Pose
from bywayd.bench.figures import MS, Figures, ratio, spread

BUDGET_S: Final = 0.05
#: Budgets while the capacity is measured: long enough that none ends because of it.
CAPACITY_BUDGET_S: Final = 2.0

Pairs = Sequence[tuple[Pose, Pose]]


def capacity(
    client: byway.Client, vehicle: str, pairs: Pairs, seconds: float, *, at_once: int, gap: float
) -> float:
    """Return replans a second that are answered with a first route, so many being open at once."""
    open_asks: deque[byway.Ask] = deque()
    began_s = time.perf_counter()
    sent = answered = 0
    while time.perf_counter() - began_s < seconds:
        while len(open_asks) < at_once:
            start, goal = pairs[sent % len(pairs)]
            open_asks.append(
                client.start_replan(
                    vehicle,
                    start,
                    goal,
                    CAPACITY_BUDGET_S,
                    unit=f"most-{sent % at_once}-{sent % 997}",
                    gap_wanted=gap,
                )
            )
            sent += 1
        open_asks.popleft().wait()
        answered += 1
    took_s = time.perf_counter() - began_s
    for ask in open_asks:
        ask.wait()
    return answered / took_s


def stage(
    client: byway.Client,
    vehicle: str,
    pairs: Pairs,
    rate: float,
    seconds: float,
    most: float,
) -> Figures:
    """
    Ask at a steady rate, whatever comes back, each with 50 ms and nothing else to do with them.

    Args:
        rate: Replans a second. most: The capacity.

    Returns:
        `in_time`: the share of all that got a route within its budget, as the daemon tells it;
        `in_time_to_capacity`: such answers a second against the capacity; and what became of all.
    """
    asks: list[byway.Ask] = []
    began_s = time.perf_counter()
    while (now_s := time.perf_counter() - began_s) < seconds:
        due_s = len(asks) / rate
        if due_s > now_s:
            time.sleep(due_s - now_s)
        start, goal = pairs[len(asks) % len(pairs)]
        asks.append(
            client.start_replan(vehicle, start, goal, BUDGET_S, unit=f"load-{len(asks) % 3001}")
        )
    took_s = time.perf_counter() - began_s
    became: Counter[str] = Counter()
    totals_s: list[float] = []
    in_time = 0
    for ask in asks:
        try:
            answer = ask.wait()
        except byway.BywayError as error:
            became[error.code] += 1
            continue
        became[answer.kind] += 1
        totals_s.append(answer.total_s)
        in_time += answer.kind == "route" and answer.total_s <= BUDGET_S
    return {
        "asked": len(asks),
        "asked_per_s": len(asks) / took_s,
        "in_time": in_time / len(asks),
        "in_time_to_capacity": ratio(in_time / took_s, most),
        "late": sum(total_s > BUDGET_S for total_s in totals_s),
        "answer_ms": spread(totals_s, MS),
        "became": dict(sorted(became.items())),
    }
