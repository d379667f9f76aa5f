"""A replan that was sent and is not answered yet."""

from collections.abc import Callable
from typing import Final, TypeAlias

from byway import messages
from byway.answer import Answer, Better, answer_of, better_of
from byway.contact import Contact
from byway.conversation import Question
from byway.errors import UnknownRequest

OnBetter: TypeAlias = Callable[[Better], object]


class Ask:
    """
    What `Client.start_replan` returns. It belongs to the client and its thread.

    Attributes:
        id: Of the request.
        unit: Whose route it is.
    """

    __slots__ = ("_answer", "_contact", "_on_better", "_question", "id", "unit")

    def __init__(
        self, contact: Contact, question: Question, unit: str, on_better: OnBetter | None
    ) -> None:
        self._contact = contact
        self._question = question
        self._on_better = on_better
        #: Once it is there.
        self._answer: Answer | None = None
        self.id: Final = question.id
        self.unit: Final = unit
        if on_better is not None:
            contact.want_better(self.id)

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
        contact, question = self._contact, self._question
        contact.enter()
        if self._answer is not None:
            return self._answer
        tell = on_better or self._on_better
        if on_better is not None and self._on_better is None:
            contact.want_better(self.id)
            contact.listen_to(self.unit)
        try:
            while True:
                if tell is not None:
                    self._tell_better(tell)
                if question.reply is not None:
                    break
                contact.turn(question)
            self._answer = answer_of(contact.reply_to(question))
        finally:
            contact.end(question)
        return self._answer

    def _tell_better(self, tell: OnBetter) -> None:
        heard = self._contact.want_better(self.id)
        while heard:
            tell(better_of(heard.popleft().received))

    def cancel(self) -> bool:
        """End it without an answer; `wait` raises Cancelled. False: it had ended already."""
        return self._steer(messages.Cancel(replan=self.id))

    def finish(self) -> bool:
        """Have it answered now with the best there is. False: it had ended already."""
        return self._steer(messages.Finish(replan=self.id))

    def _steer(self, message: messages.Cancel | messages.Finish) -> bool:
        try:
            self._contact.ask(message, messages.Noted)
        except UnknownRequest:
            return False
        return True
