"""A replan that was sent and is not answered yet."""

from collections.abc import Callable
from typing import Final, TypeAlias

from byway import messages
from byway.answer import Answer, Better, answer_of, better_of
from byway.contact import Contact
from byway.conversation import Question
from byway.errors import UnknownRequest
from byway.link import Drive, Steps

OnBetter: TypeAlias = Callable[[Better], object]


def begin(contact: Contact, asked: messages.Replan, on_better: OnBetter | None) -> Steps["Asked"]:
    """Send a replan."""
    contact.enter()
    if on_better is not None:
        yield from contact.listen_to(asked.unit)
    question = yield from contact.begin(asked, wants_better=on_better is not None)
    return Asked(contact, question, asked, on_better)


def steer(contact: Contact, message: messages.Cancel | messages.Finish) -> Steps[bool]:
    """Cancel or finish replans; tell whether there was one."""
    try:
        yield from contact.ask(message, messages.Noted)
    except UnknownRequest:
        return False
    return True


class Asked:
    """What both kinds of clients know of an open replan."""

    __slots__ = ("_answer", "_contact", "_on_better", "_question", "message")

    def __init__(
        self,
        contact: Contact,
        question: Question,
        message: messages.Replan,
        on_better: OnBetter | None,
    ) -> None:
        self._contact = contact
        self._question = question
        self._on_better = on_better
        #: Once it is there.
        self._answer: Answer | None = None
        self.message: Final = message

    @property
    def id(self) -> str:
        """Of the request."""
        return self._question.id

    def wait(self, on_better: OnBetter | None) -> Steps[Answer]:
        """See `Ask.wait`."""
        contact, question = self._contact, self._question
        contact.enter()
        if self._answer is not None:
            return self._answer
        tell = on_better or self._on_better
        try:
            if on_better is not None and self._on_better is None:
                contact.want_better(self.id)
                yield from contact.listen_to(self.message.unit)
            while True:
                if tell is not None:
                    self._tell_better(tell)
                if question.reply is not None:
                    break
                yield from contact.turn(question)
            self._answer = answer_of((yield from contact.reply_to(question)), self.message)
        finally:
            contact.end(question)
        return self._answer

    def _tell_better(self, tell: OnBetter) -> None:
        heard = self._contact.want_better(self.id)
        while heard:
            tell(better_of(heard.popleft().received, self.message))

    def cancel(self) -> Steps[bool]:
        """See `Ask.cancel`."""
        return steer(self._contact, messages.Cancel(replan=self.id))

    def finish(self) -> Steps[bool]:
        """See `Ask.finish`."""
        return steer(self._contact, messages.Finish(replan=self.id))


class Ask:
    """
    What `Client.start_replan` returns. It belongs to the client and its thread.

    Attributes:
        id: Of the request.
        unit: Whose route it is.
    """

    __slots__ = ("_asked", "_run", "id", "unit")

    def __init__(self, asked: Asked, drive: Drive) -> None:
        self._asked = asked
        self._run = drive
        self.id: Final = asked.id
        self.unit: Final = asked.message.unit

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
        return self._run(self._asked.wait(on_better))

    def cancel(self) -> bool:
        """End it without an answer; `wait` raises Cancelled. False: it had ended already."""
        return self._run(self._asked.cancel())

    def finish(self) -> bool:
        """Have it answered now with the best there is. False: it had ended already."""
        return self._run(self._asked.finish())
