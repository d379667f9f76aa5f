"""
Byway's protocol and clients: how a program talks to a planning daemon.

    with byway.Client("tcp://127.0.0.1:7461") as client:
        client.replace_layer("fixed", polygons={"kiln": [(10, 5), (18, 5), (18, 9), (10, 9)]})
        answer = client.replan("tug", (2.0, 2.0, 0.0), (40.0, 22.0, 1.57), budget_s=0.050)

What travels is described in protocol/SPEC.md. Byway is not a safety function: an answer is a
proposal to a vehicle controller.
"""

from byway.answer import ROUTE_TABLE, Answer, Better, Blockage, Leg, Route
from byway.ask import Ask
from byway.client import Client, Event, Vehicle
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
from byway.site_view import Cells, LayerView, SiteView

__all__ = [
    "ROUTE_TABLE",
    "Answer",
    "Ask",
    "BadGeometry",
    "BadMessage",
    "BadReply",
    "BadValue",
    "Better",
    "Blockage",
    "BywayError",
    "Cancelled",
    "Cells",
    "Client",
    "Conflict",
    "DaemonFault",
    "DaemonLost",
    "Event",
    "Forbidden",
    "Internal",
    "LayerView",
    "Leg",
    "LinkFault",
    "NewEpoch",
    "NotOwner",
    "OutsideLimits",
    "Overloaded",
    "Route",
    "SenderFault",
    "SiteView",
    "StaleLayer",
    "Stopping",
    "Superseded",
    "TimedOut",
    "TooLarge",
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
