"""What is said when the core does what it must never do."""


class BrokenPromise(AssertionError):
    """The core did what it must never do."""


def promise(kept: bool, text: str, *facts: object) -> None:
    if not kept:
        raise BrokenPromise(f"{text}: {', '.join(map(str, facts))}" if facts else text)
