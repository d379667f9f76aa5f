"""The site: obstacles in layers, the tiles made from them, and immutable snapshots."""

from byway_planning.site.memory import Memory, MemoryFull
from byway_planning.site.model import SiteModel
from byway_planning.site.scene import Scene
from byway_planning.site.settings import LayerSettings, SiteSettings
from byway_planning.site.shapes import DiscShape, PolygonShape, Shape, SiteError, box_shape
from byway_planning.site.site import Site
from byway_planning.site.snapshot import Handle, Snapshot
from byway_planning.site.solids import Solids
from byway_planning.site.tracks import Track, base_id

__all__ = [
    "DiscShape",
    "Handle",
    "LayerSettings",
    "Memory",
    "MemoryFull",
    "PolygonShape",
    "Scene",
    "Shape",
    "Site",
    "SiteError",
    "SiteModel",
    "SiteSettings",
    "Snapshot",
    "Solids",
    "Track",
    "base_id",
    "box_shape",
]
