"""Inner kernels of the planning room called many times over, for timing them alone."""

import numpy as np
import numpy.typing as npt

from byway_planning.collision import pose_free
from byway_planning.curves.reeds_shepp import reeds_shepp_length
from byway_planning.kernel import kernel
from byway_planning.motion import motion_free
from byway_planning.site.scene import Scene
from byway_planning.vehicles.body import Body

Floats = npt.NDArray[np.float64]


@kernel("rf8[:, ::1]")
def lengths_loop(queries: Floats) -> float:
    """Sum of the shortest Reeds-Shepp lengths to (n, 3) poses, for a turning radius of 1."""
    total = 0.0
    for i in range(queries.shape[0]):
        total += reeds_shepp_length(queries[i, 0], queries[i, 1], queries[i, 2])
    return total


@kernel(Scene, Body, "rf8[:, ::1]", "u1[::1]")
def poses_loop(scene: Scene, body: Body, poses: Floats, free: npt.NDArray[np.uint8]) -> int:
    """Mark which poses (n, 3) are free, and count them."""
    count = 0
    for i in range(poses.shape[0]):
        free[i] = 1 if pose_free(scene, body, poses[i, 0], poses[i, 1], poses[i, 2]) else 0
        count += free[i]
    return count


@kernel(Scene, Body, "rf8[:, ::1]", "u1[::1]")
def motions_loop(scene: Scene, body: Body, motions: Floats, free: npt.NDArray[np.uint8]) -> int:
    """Mark which motions (n, 5) are free (pose, curvature, signed length), and count them."""
    count = 0
    for i in range(motions.shape[0]):
        m = motions[i]
        free[i] = 1 if motion_free(scene, body, m[0], m[1], m[2], m[3], m[4]) else 0
        count += free[i]
    return count
