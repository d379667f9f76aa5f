"""Changes as they reach the clerk, made from as little as can be said."""

from __future__ import annotations

from typing import Any

import numpy as np

from byway import messages, obstacles
from byway.packed import pack

DURABLE = {"unknown_blocks": False, "outlines_only": False, "durable": True}


def change(what: str, layer: str = "stacks", **more: Any) -> dict[str, Any]:
    told = {
        "what": what,
        "layer": layer,
        "settings": DURABLE,
        "message": None,
        "packed": b"",
        "ids": (),
        "expires_s": None,
    }
    return {**told, **more}


def put(
    layer: str = "stacks",
    *,
    what: str = "put",
    polygons: Any = None,
    expires_s: float | None = None,
    **discs: tuple[float, float, float],
) -> dict[str, Any]:
    """A put, or replacement, of discs by id and of polygons."""
    fields, packed = obstacles.pack_shapes(obstacles.shapes(polygons or {}, discs))
    model = messages.Put if what == "put" else messages.ReplaceLayer
    message = model(layer=layer, **fields).model_dump()
    return change(what, layer, message=message, packed=packed, expires_s=expires_s)


def drop(*ids: str, layer: str = "stacks") -> dict[str, Any]:
    return change("drop", layer, ids=ids)


def patch(
    x_m: float,
    y_m: float,
    rows: int,
    columns: int,
    *,
    cell_m: float = 0.5,
    heading_rad: float = 0.0,
    value: int = 1,
    layer: str = "stacks",
) -> dict[str, Any]:
    where, packed = pack({"cells": np.full((rows, columns), value, np.uint8)})
    message = messages.Patch(
        layer=layer, corner_m=(x_m, y_m), cell_m=cell_m, heading_rad=heading_rad, columns=where
    )
    return change("patch", layer, message=message.model_dump(), packed=packed)
