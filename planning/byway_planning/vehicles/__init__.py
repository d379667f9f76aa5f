"""Vehicles: what a caller describes (`models`), and what kernels know of it (`body`)."""

from byway_planning.vehicles.body import CAR, DISC, FORWARD_CAR, Body, Limits
from byway_planning.vehicles.models import Car, Disc, ForwardCar, Vehicle, vehicle_from_settings

__all__ = [
    "CAR",
    "DISC",
    "FORWARD_CAR",
    "Body",
    "Car",
    "Disc",
    "ForwardCar",
    "Limits",
    "Vehicle",
    "vehicle_from_settings",
]
