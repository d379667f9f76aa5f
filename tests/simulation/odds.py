"""
What may go wrong in one simulated day, and how often: drawn from the seed, by swarm.

Some faults are switched off entirely and the rest are wildly uneven, so that days differ from
each other; a day on which everything happens a little explores less than one on which workers
die all the time and nothing else does.
"""

from __future__ import annotations

import random
from dataclasses import dataclass, field

from byway.messages import WhenStale

#: Every fault, with its odds on a bad day. What is in brackets is one chance of these.
FAULTS = {
    "lose": 0.2,  # (a message) the network loses it
    "repeat": 0.2,  # it arrives twice
    "hold_up": 0.2,  # it arrives up to 50 ms late, after others
    "reconnect": 0.05,  # (something sent) the sender comes from a new address from now on
    "garble": 0.05,  # (something sent) it is not what its kind should be
    "cancel": 0.1,  # (a replan)
    "finish": 0.2,
    "conflict": 0.1,  # its id is used again for another body
    "impatient": 0.3,  # it is repeated although the answer is still due
    "senseless": 0.1,  # it names a vehicle or layer that is not there
    "worker_dies": 0.1,  # (a job)
    "worker_hangs": 0.1,
    "worker_late": 0.1,
    "worker_fails": 0.1,
    "worker_boasts": 0.05,  # it calls a route better that is not
    "worker_raves": 0.03,  # it says what makes no sense
    "worker_stillborn": 0.2,  # (a start) it is lost before it was ready
    "slow_start": 0.05,  # it takes so long that it may be killed for it
    "blocked": 0.3,  # (a recheck) the route does not stand any more
    "surveyor_dies": 0.1,  # (a batch) before it is applied, or between publishing and telling
    "surveyor_hangs": 0.03,
    "surveyor_raves": 0.02,
    "clerk_dies": 0.2,  # (a batch or recall) before it is done, or before anybody knows of it
    "clerk_hangs": 0.1,
    "clerk_raves": 0.1,
    "clerk_stillborn": 0.3,
    "disk_full": 0.05,  # (a batch) nothing can be written for up to three seconds
    "refuse": 0.2,  # (a change) the surveyor does not take it
    "trespass": 0.1,  # (a change) it is for a layer of somebody else
    "driver_silent": 0.05,  # (a turn of a driver) it says nothing for longer than it may
    "fall_silent": 0.02,  # a source says nothing for a while
    "expectant": 1.0,  # (a claim) it tells how often its layer changes, and what if it does not
    "restart": 0.0003,  # (an event) the daemon is killed, and another takes its place
    "lag": 0.3,  # (a tick) the front gets its turn late, within what its margin allows
}

#: What is normal, in events per second of the simulated time.
RATES = {
    "replans": (20.0, 600.0),
    "changes": (10.0, 300.0),
    "questions": (0.5, 20.0),
    "drives": (5.0, 100.0),  # what drivers ask and tell
}


@dataclass
class Odds:
    """Odds of every fault, and rates of what is normal. `calm` switches all faults off."""

    faults: dict[str, float] = field(default_factory=dict)
    rates: dict[str, float] = field(default_factory=dict)
    workers: int = 2
    clients: int = 4
    sources: int = 3
    units: int = 6
    guards_max: int = 256
    #: Sources whose layers are durable.
    durable: int = 0
    expiries_max: int = 100_000
    #: What is done when the layer that is declared at the start becomes stale.
    when_stale: WhenStale = "report"

    @classmethod
    def draw(cls, rng: random.Random) -> Odds:
        """Return the odds of one day."""
        alive = rng.sample(sorted(FAULTS), rng.randint(1, len(FAULTS)))
        units = rng.randint(1, 12)
        durable = rng.choice([0, 1, 2])
        return cls(
            {
                name: FAULTS[name] * rng.uniform(0.02, 1.0) if name in alive else 0.0
                for name in FAULTS
            },
            {name: low * (high / low) ** rng.random() for name, (low, high) in RATES.items()},
            workers=rng.randint(1, 5),
            clients=rng.randint(1, 6),
            sources=rng.randint(1, 4),
            units=units,
            # On some days there is not room for the guards of all.
            guards_max=rng.choice([max(1, units - 1), 256]),
            durable=durable,
            # What is recalled without room for its expiry would stay.
            expiries_max=100_000 if durable else rng.choice([20, 100_000]),
            when_stale="refuse" if rng.random() < 0.1 else "report",
        )

    def calm(self) -> None:
        """From now on nothing goes wrong."""
        self.faults = dict.fromkeys(self.faults, 0.0)
