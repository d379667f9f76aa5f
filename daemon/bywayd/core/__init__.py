"""
Every decision of the daemon, as plain state machines: `(event, now) -> effects`.

Nothing here waits, sends, logs, forks or reads a clock. The runtime turns what happens outside
into events, hands each to `Front.handle`, and carries out the effects that come back. That is
what lets a simulated world drive this very code through a hundred thousand events in seconds,
from one seed.

The rooms, from the ground up:

* `instants`, `invariant`   time as a type; rules of our own that stop the process when broken
* `events`, `effects`       what may happen; what may be done about it
* `docket`                  the life of one replan, as a table of legal moves
* `ledger`                  sources, layers, numbers, revisions: what is acknowledged, and when
* `roster`                  who of the crew is starting, idle, busy, silent, lost
* `health`                  counters and histograms
* `front`                   ties them together
"""
