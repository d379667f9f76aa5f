"""
Everything Byway raises on purpose, sorted by whose fault it was.

* BywayError
  + SenderFault     what was sent cannot be served; sending it again changes nothing
    - BadMessage  UnsupportedVersion  UnknownKind  TooLarge  BadValue  BadGeometry
    - OutsideLimits  UnknownVehicle  UnknownLayer  UnknownRequest  NotOwner  Conflict
    - Forbidden
  + Withdrawn       a replan that ended without an answer because somebody wanted it so
    - Superseded  Cancelled
  + Unavailable     right question, wrong moment
    - Overloaded  Warming  Stopping  NewEpoch  StaleLayer
  + DaemonFault     the daemon broke
    - Internal
  + LinkFault       found out by the client; these codes never travel
    - DaemonLost  TimedOut  BadReply

The codes are stable and closed: a daemon sends no other. A client that meets a code it does
not know (a newer daemon) raises `BywayError` itself, with that code.
Misuse of the client in the program itself (a second thread, a closed client) is a
RuntimeError: no peer has anything to do with it.
"""

from collections.abc import Mapping
from typing import Any, ClassVar, Final, TypeAlias

from byway.header import Header

Facts: TypeAlias = Mapping[str, Any]


class BywayError(Exception):
    """
    Something did not work, and this is why.

    Attributes:
        code: Stable name for programs.
        text: A sentence for a person.
        facts: What a program may want to know, by name; the SPEC lists them per code.
        retry_after_s: Seconds after which trying again may help, if that is known.
    """

    default_code: ClassVar[str] = ""

    def __init__(
        self,
        text: str,
        facts: Facts | None = None,
        *,
        retry_after_s: float | None = None,
        code: str | None = None,
    ) -> None:
        self.code: Final = self.default_code if code is None else code
        self.text: Final = text
        self.facts: Final = dict(facts or {})
        self.retry_after_s: Final = retry_after_s
        super().__init__(f"{self.code}: {text}")


class SenderFault(BywayError):
    """
    What was sent cannot be served; sending it again changes nothing.

    Attributes:
        header: Of the message at fault, a `Header`, where that much could be decoded.
    """

    header: Header | None = None


class BadMessage(SenderFault):
    """Not decodable, or not the fields that its kind has."""

    default_code = "bad_message"


class UnsupportedVersion(SenderFault):
    """Decodable, but in a version of the SPEC that the receiver does not speak."""

    default_code = "unsupported_version"


class UnknownKind(SenderFault):
    """Decodable, but no message of that kind goes to this socket."""

    default_code = "unknown_kind"


class TooLarge(SenderFault):
    """More bytes, obstacles or cells than one message or the site may have."""

    default_code = "too_large"


class BadValue(SenderFault):
    """A field has the right type and a value that cannot be meant."""

    default_code = "bad_value"


class BadGeometry(SenderFault):
    """A polygon that crosses itself, a disc without radius, cells with other values, ..."""

    default_code = "bad_geometry"


class OutsideLimits(SenderFault):
    """Outside the limits of the site."""

    default_code = "outside_limits"


class UnknownVehicle(SenderFault):
    """The daemon knows no vehicle of that name."""

    default_code = "unknown_vehicle"


class UnknownLayer(SenderFault):
    """The site has no layer of that name."""

    default_code = "unknown_layer"


class UnknownRequest(SenderFault):
    """No replan is open under that id or unit."""

    default_code = "unknown_request"


class NotOwner(SenderFault):
    """The layer belongs to another source."""

    default_code = "not_owner"


class Conflict(SenderFault):
    """It contradicts what the daemon already has: an id with another body, other settings."""

    default_code = "conflict"


class Forbidden(SenderFault):
    """The key of the sender does not allow this."""

    default_code = "forbidden"


class Withdrawn(BywayError):
    """A replan that ended without an answer because somebody wanted it so."""


class Superseded(Withdrawn):
    """A newer replan for the same unit took its place."""

    default_code = "superseded"


class Cancelled(Withdrawn):
    """It was cancelled."""

    default_code = "cancelled"


class Unavailable(BywayError):
    """Right question, wrong moment."""


class Overloaded(Unavailable):
    """More is asked than the workers can do."""

    default_code = "overloaded"


class Warming(Unavailable):
    """The daemon has started and is not yet ready."""

    default_code = "warming"


class Stopping(Unavailable):
    """The daemon is on its way out."""

    default_code = "stopping"


class NewEpoch(Unavailable):
    """
    The daemon was restarted since the asker last heard of it.

    Its site may still lack what other sources have to send again, so the request was not
    served. The client has taken the new epoch over, and has sent its own layers again:
    asking once more works, when the asker decides that the site is complete.
    """

    default_code = "new_epoch"


class StaleLayer(Unavailable):
    """A layer that replans depend on has not changed for too long."""

    default_code = "stale_layer"


class DaemonFault(BywayError):
    """The daemon broke."""


class Internal(DaemonFault):
    """The daemon failed at this request."""

    default_code = "internal"


class LinkFault(BywayError):
    """Found out by the client; these codes never travel."""


class DaemonLost(LinkFault):
    """Nobody listens at the endpoint, or the connection broke and did not come back in time."""

    default_code = "daemon_lost"


class TimedOut(LinkFault):
    """Connected, but no answer came in time."""

    default_code = "timed_out"


class BadReply(LinkFault):
    """The daemon sent something that its SPEC does not allow."""

    default_code = "bad_reply"


_CODED: Final = (
    *(BadMessage, UnsupportedVersion, UnknownKind, TooLarge, BadValue, BadGeometry),
    *(OutsideLimits, UnknownVehicle, UnknownLayer, UnknownRequest, NotOwner, Conflict),
    *(Forbidden, Superseded, Cancelled),
    *(Overloaded, Warming, Stopping, NewEpoch, StaleLayer, Internal),
)

#: Every code that may travel, with its class.
CODES: Final[Mapping[str, type[BywayError]]] = {error.default_code: error for error in _CODED}


def from_code(
    code: str, text: str, facts: Facts | None = None, retry_after_s: float | None = None
) -> BywayError:
    """Return the exception for a code that a daemon sent; `BywayError` itself if it is new."""
    return CODES.get(code, BywayError)(text, facts, retry_after_s=retry_after_s, code=code)
