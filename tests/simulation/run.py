"""
Run simulated days from the shell: `python -m tests.simulation.run --seed 1 --events 1000000`.

One seed is one day; with more events than a day has, days with the following seeds come after
it. A failure prints its seed, and that seed replays it.
"""

from __future__ import annotations

import argparse
import collections
import sys
import time

from tests.simulation.world import World


def main() -> int:
    """Run days until the events are used up; 1 if a promise was broken."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--events", type=int, default=100_000, help="events over all days")
    parser.add_argument("--day", type=int, default=100_000, help="events of one day")
    parser.add_argument("--quiet", action="store_true", help="print failures and the end only")
    told = parser.parse_args()
    began_s, done, seed = time.perf_counter(), 0, told.seed
    faults: collections.Counter[str] = collections.Counter()
    while done < told.events:
        world = World(seed)
        try:
            world.run(min(told.day, told.events - done), calm=seed % 3 != 0)
        except BaseException as fault:
            print(fault)
            print(f"seed {seed}: broken after {world.event_count} events")
            return 1
        done += world.event_count
        faults.update(world.counts)
        if not told.quiet:
            took_s = time.perf_counter() - began_s
            print(f"seed {seed}: {done} events, {took_s:.1f} s, lives {world.lives}", flush=True)
        seed += 1
    print(f"{done} events, no promise broken; faults: {dict(sorted(faults.items()))}")
    return 0


if __name__ == "__main__":
    sys.exit(main())
