"""
Every message, one model each. SPEC.md is the authority; a test keeps the two together.

What a client sends refuses unknown fields: a misspelt limit must not be ignored. What a daemon
sends may carry fields that this code does not know yet, and texts (states, kinds of outcome)
that it does not know yet.

The models hold what is in the body of a message. What names and addresses it is the header
(see frames.py); long numbers lie in a third frame, of which the body has the `columns`.
"""

from typing import Final

from pydantic import BaseModel

from byway.change_messages import (
    Acknowledged,
    AnyChange,
    Claim,
    Drop,
    Patch,
    Put,
    Refused,
    ReplaceLayer,
    Resend,
    Scan,
    Track,
    WhenStale,
)
from byway.event_messages import (
    Alert,
    BetterMessage,
    BlockageIs,
    Cleared,
    GuardLost,
    LayerState,
    LegIs,
    Listening,
    MovableIs,
    OutcomeIs,
    RemedyIs,
    Rerouted,
    RerouteFailed,
)
from byway.message_base import (
    Age,
    Blob,
    BlockedIs,
    Box,
    Budget,
    Change,
    Count,
    Distance,
    Expiry,
    Fact,
    Flag,
    Heading,
    Message,
    Metres,
    Name,
    Number,
    Point,
    Pose,
    Range,
    Ratio,
    Real,
    Reply,
    Request,
    Seconds,
    Text,
)
from byway.request_messages import (
    Accepted,
    AnswerMessage,
    Cancel,
    CellsIs,
    ErrorMessage,
    Finish,
    Guard,
    GuardedIs,
    GuardIs,
    Health,
    HealthIs,
    Hello,
    Histogram,
    LayerHealth,
    LayerIs,
    Noted,
    Progress,
    Release,
    Replan,
    Site,
    SiteIs,
    TrackIs,
    VehicleIs,
    Vehicles,
    VehiclesAre,
    Welcome,
)

__all__ = [
    "CHANGES",
    "CHANGE_REPLIES",
    "EVENTS",
    "REQUESTS",
    "REQUEST_REPLIES",
    "Accepted",
    "Acknowledged",
    "Age",
    "Alert",
    "AnswerMessage",
    "AnyChange",
    "BetterMessage",
    "Blob",
    "BlockageIs",
    "BlockedIs",
    "Box",
    "Budget",
    "Cancel",
    "CellsIs",
    "Change",
    "Claim",
    "Cleared",
    "Count",
    "Distance",
    "Drop",
    "ErrorMessage",
    "Expiry",
    "Fact",
    "Finish",
    "Flag",
    "Guard",
    "GuardIs",
    "GuardLost",
    "GuardedIs",
    "Heading",
    "Health",
    "HealthIs",
    "Hello",
    "Histogram",
    "LayerHealth",
    "LayerIs",
    "LayerState",
    "LegIs",
    "Listening",
    "Message",
    "Metres",
    "MovableIs",
    "Name",
    "Noted",
    "Number",
    "OutcomeIs",
    "Patch",
    "Point",
    "Pose",
    "Progress",
    "Put",
    "Range",
    "Ratio",
    "Real",
    "Refused",
    "Release",
    "RemedyIs",
    "ReplaceLayer",
    "Replan",
    "Reply",
    "Request",
    "RerouteFailed",
    "Rerouted",
    "Resend",
    "Scan",
    "Seconds",
    "Site",
    "SiteIs",
    "Text",
    "Track",
    "TrackIs",
    "VehicleIs",
    "Vehicles",
    "VehiclesAre",
    "Welcome",
    "WhenStale",
    "build_all",
    "every_message",
]

REQUESTS: Final = (
    *(Hello, Replan, Cancel, Finish, Site, Vehicles, Health),
    *(Guard, Progress, Release),
)
CHANGES: Final = (Claim, Put, Drop, ReplaceLayer, Patch, Scan, Track)
REQUEST_REPLIES: Final = (
    *(Welcome, Accepted, AnswerMessage, Noted, GuardIs, ErrorMessage),
    *(SiteIs, VehiclesAre, HealthIs),
)
CHANGE_REPLIES: Final = (Acknowledged, Refused, Resend, ErrorMessage)
EVENTS: Final = (
    *(BetterMessage, HealthIs, Listening),
    *(Alert, Cleared, GuardLost, Rerouted, RerouteFailed, LayerState),
)


def every_message() -> tuple[type[Message], ...]:
    """Return every kind of message once, in the order of the SPEC."""
    found: dict[str, type[Message]] = {}
    for group in (REQUESTS, CHANGES, REQUEST_REPLIES, CHANGE_REPLIES, EVENTS):
        for model in group:
            found[model.kind] = model
    return tuple(found.values())


def build_all() -> None:
    """
    Build the validators of all messages now, some 50 ms in all.

    Otherwise each is built when it is first used: a command that sends one question starts
    sooner, but a daemon does not want to do it while somebody waits.
    """
    models: tuple[type[BaseModel], ...] = (*every_message(), OutcomeIs)
    for model in models:
        model.model_rebuild()
