"""Scenes for lower bounds, and a visibility graph of shapely and networkx to hold them against."""

import math
from itertools import combinations

import networkx
import numpy as np
import shapely

from byway_planning import Disc, Site
from byway_planning.bounds import lower_bound
from byway_planning.site.solids import Solids
from byway_planning.vehicles.models import Vehicle

WIDE = (-60.0, -60.0, 60.0, 60.0)
#: More work than any of these scenes takes.
ALL_WORK = 10**9


def solids_of(polygons, discs=(), limits_m=WIDE) -> Solids:
    site = Site.from_shapes(
        {str(i): ring for i, ring in enumerate(polygons)},
        {f"disc {i}": disc for i, disc in enumerate(discs)},
        limits_m=limits_m,
        cell_m=0.5,
    )
    return site.snapshot.solids()


def disc(radius_m: float) -> Vehicle:
    """A disc without clearance, made larger by what the check of a route lets it come nearer."""
    return Disc(radius_m=radius_m, clearance_m=1e-6)


def bound_of(solids, vehicle, start, goal, **more) -> float:
    more.setdefault("work_max", ALL_WORK)
    return lower_bound(solids, vehicle.body(), _pose(start), _pose(goal), **more)


def _pose(place):
    return (*place, 0.0) if len(place) == 2 else place


def box(x, y, width, height, turned=0.0):
    """A rectangle around (x, y), counter-clockwise."""
    corners = 0.5 * np.array(
        [(-width, -height), (width, -height), (width, height), (-width, height)]
    )
    return moved(corners, turned, (x, y))


def moved(points, turned=0.0, shift=(0.0, 0.0)):
    c, s = math.cos(turned), math.sin(turned)
    return np.asarray(points, float) @ np.array([[c, s], [-s, c]]) + shift


def random_polygons(seed, count, spread_m=14.0):
    """Polygons that may overlap, convex and concave, none at the middle of the left or right."""
    rng = np.random.default_rng(seed)
    found = []
    while len(found) < count:
        corners = int(rng.integers(3, 8))
        angles = np.sort(rng.uniform(0.0, 2.0 * math.pi, corners))
        if np.diff(angles, append=angles[0] + 2.0 * math.pi).min() < 0.3:
            continue
        radii = rng.uniform(0.6, 3.0, corners)
        ring = np.column_stack([np.cos(angles), np.sin(angles)]) * radii[:, None]
        ring += rng.uniform((-0.5 * spread_m, -0.3 * spread_m), (0.5 * spread_m, 0.3 * spread_m))
        if shapely.Polygon(ring).is_valid:
            found.append(ring)
    return found


def graph_length(polygons, radius_m, start, goal, *, outer, quadrant=5):
    """
    Shortest way round polygons grown by a radius, over a complete visibility graph.

    The grown corners are polygons, outside the true arcs with `outer` (then the length is not
    below the true one), inside them without (then it is not above).
    """
    if outer:
        # a fillet may be divided more coarsely than asked for, by up to half a piece
        radius_m /= math.cos(0.8 * 0.5 * math.pi / quadrant)
    grown = shapely.union_all(
        [shapely.Polygon(ring).buffer(radius_m, quad_segs=quadrant) for ring in polygons]
    )
    solid = grown.buffer(-1e-7, join_style="mitre", mitre_limit=10.0)
    rings = [r for p in shapely.get_parts(grown) for r in (p.exterior, *p.interiors)]
    corners = [tuple(xy) for ring in rings for xy in shapely.get_coordinates(ring)[:-1]]
    places = [tuple(start), tuple(goal), *corners]
    pairs = np.array(list(combinations(range(len(places)), 2)))
    ends = np.array(places)[pairs]
    shapely.prepare(solid)
    free = ~shapely.intersects(solid, shapely.linestrings(ends))
    graph = networkx.Graph()
    graph.add_nodes_from((0, 1))
    lengths = np.hypot(*(ends[:, 0] - ends[:, 1]).T)
    graph.add_weighted_edges_from(
        (int(a), int(b), float(d))
        for (a, b), d, seen in zip(pairs, lengths, free, strict=True)
        if seen
    )
    try:
        return networkx.dijkstra_path_length(graph, 0, 1)
    except networkx.NetworkXNoPath:
        return math.inf
