"""`byway warm`: compile ahead, when an image is built or before a service starts."""

import time

from bywayd.commands.shared import AsJson, console, say_json


def warm(as_json: AsJson = False) -> None:
    """Compile the planning kernels into the cache, so that the daemon starts at once."""
    import byway_planning
    from byway_planning.kernel_cache import cache_root

    began_s = time.monotonic()
    out = console(to_stderr=True)

    def show(done: int, total: int, name: str) -> None:
        out.print(f"{done + 1:3d}/{total} {name.removeprefix('byway_planning.')}", style="dim")

    byway_planning.warm(show)
    took_s = time.monotonic() - began_s
    if as_json:
        say_json({"seconds": round(took_s, 3), "cache": str(cache_root())})
    else:
        console().print(f"Kernels ready after {took_s:.1f} s, kept in {cache_root()}.")
