"""What the runtime measures about itself, once a second, for the health record."""

from collections.abc import Mapping
from dataclasses import dataclass, field


@dataclass
class Turns:
    """How long turns of the loop took since they were last reported. Waiting does not count."""

    count: int = 0
    longest_ns: int = 0

    def note(self, took_ns: int) -> None:
        self.count += 1
        self.longest_ns = max(self.longest_ns, took_ns)

    def report(self) -> dict[str, int]:
        """Return the numbers since the last report, and begin anew."""
        facts = {"turns": self.count, "turn_longest_us": self.longest_ns // 1000}
        self.count = self.longest_ns = 0
        return facts


@dataclass
class Memories:
    """
    How much memory each process takes, looked up one process at a time.

    A look goes through all mappings of a process and takes up to a millisecond; so each call
    of `look` looks at one of them, and the numbers of the others are some seconds old.
    """

    #: Bytes by name. Memory that several processes share is divided among them.
    found: dict[str, int] = field(default_factory=dict)
    _next: int = 0

    def look(self, processes: Mapping[str, int]) -> dict[str, int]:
        """Look at the next process, and return what is known of all of them."""
        self.found = {name: known for name, known in self.found.items() if name in processes}
        if processes:
            names = sorted(processes)
            self._next = (self._next + 1) % len(names)
            name = names[self._next]
            self.found[name] = proportional_bytes(processes[name])
        return dict(self.found)


def proportional_bytes(pid: int) -> int:
    """Return the memory of a process, shared pages divided by their users; 0 if it is gone."""
    try:
        with open(f"/proc/{pid}/smaps_rollup") as file:
            for line in file:
                if line.startswith("Pss:"):
                    return int(line.split()[1]) * 1024
    except OSError:
        pass
    return 0
