"""
Byway's protocol and clients: how a program talks to a planning daemon.

    with byway.Client("tcp://127.0.0.1:7461") as client:
        client.replace_layer("fixed", polygons={"kiln": [(10, 5), (18, 5), (18, 9), (10, 9)]})
        answer = client.replan("tug", (2.0, 2.0, 0.0), (40.0, 22.0, 1.57), budget_s=0.050)

What travels is described in protocol/SPEC.md. Byway is not a safety function: an answer is a
proposal to a vehicle controller.
"""

from byway.answer import (
    ROUTE_TABLE,
    Answer,
    Better,
    Blockage,
    Leg,
    Movable,
    Remedy,
    Rerouted,
    Route,
)
from byway.ask import Ask
from byway.client import Client, Vehicle
from byway.errors import (
    BadGeometry,
    BadMessage,
    BadReply,
    BadValue,
    BywayError,
    Cancelled,
    Conflict,
    DaemonFault,
    DaemonLost,
    Forbidden,
    Internal,
    LinkFault,
    NewEpoch,
    NotOwner,
    OutsideLimits,
    Overloaded,
    SenderFault,
    StaleLayer,
    Stopping,
    Superseded,
    TimedOut,
    TooLarge,
    Unavailable,
    UnknownKind,
    UnknownLayer,
    UnknownRequest,
    UnknownVehicle,
    UnsupportedVersion,
    Warming,
    Withdrawn,
)
from byway.event import Event
from byway.layer_source import LayerSource
from byway.messages import (
    Alert,
    BlockedIs,
    Cleared,
    GuardIs,
    GuardLost,
    HealthIs,
    LayerState,
    RerouteFailed,
)
from byway.site_view import Cells, GuardedView, LayerView, SiteView, TrackView
from byway.tracks import Track

__all__ = [
    "ROUTE_TABLE",
    "Alert",
    "Answer",
    "Ask",
    "BadGeometry",
    "BadMessage",
    "BadReply",
    "BadValue",
    "Better",
    "Blockage",
    "BlockedIs",
    "BywayError",
    "Cancelled",
    "Cells",
    "Cleared",
    "Client",
    "Conflict",
    "DaemonFault",
    "DaemonLost",
    "Event",
    "Forbidden",
    "GuardIs",
    "GuardLost",
    "GuardedView",
    "HealthIs",
    "Internal",
    "LayerSource",
    "LayerState",
    "LayerView",
    "Leg",
    "LinkFault",
    "Movable",
    "NewEpoch",
    "NotOwner",
    "OutsideLimits",
    "Overloaded",
    "Remedy",
    "RerouteFailed",
    "Rerouted",
    "Route",
    "SenderFault",
    "SiteView",
    "StaleLayer",
    "Stopping",
    "Superseded",
    "TimedOut",
    "TooLarge",
    "Track",
    "TrackView",
    "Unavailable",
    "UnknownKind",
    "UnknownLayer",
    "UnknownRequest",
    "UnknownVehicle",
    "UnsupportedVersion",
    "Vehicle",
    "Warming",
    "Withdrawn",
]
