"""A replan that was sent and is not answered yet."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Final, TypeAlias

from byway.answer import Answer, Better

if TYPE_CHECKING:
    from byway.client import Client
    from byway.conversation import Question

OnBetter: TypeAlias = Callable[[Better], object]


class Ask:
    """
    What `Client.start_replan` returns. It belongs to the client and its thread.

    Attributes:
        id: Of the request.
        unit: Whose route it is.
    """

    __slots__ = ("_client", "answer", "deadline_s", "id", "on_better", "question", "unit")

    def __init__(
        self,
        client: Client,
        question: Question,
        unit: str,
        deadline_s: float,
        on_better: OnBetter | None,
    ) -> None:
        self._client = client
        self.question: Final = question
        self.id: Final = question.id
        self.unit: Final = unit
        self.deadline_s: Final = deadline_s
        self.on_better = on_better
        #: Once it is there.
        self.answer: Answer | None = None

    def wait(self, on_better: OnBetter | None = None) -> Answer:
        """
        Wait for the final answer.

        Args:
            on_better: Called with every better route in order, and never after `wait` has
                returned. Given here, not to `start_replan`, it hears the last better route
                that was found before, and those that follow.

        Raises:
            Withdrawn: If it was cancelled or superseded.
            BywayError: As `Client.replan`.
        """
        return self._client._wait_for(self, on_better or self.on_better)

    def cancel(self) -> bool:
        """End it without an answer; `wait` raises Cancelled. False: it had ended already."""
        return self._client.cancel(replan=self.id)

    def finish(self) -> bool:
        """Have it answered now with the best there is. False: it had ended already."""
        return self._client.finish(replan=self.id)
