"""The search methods by name."""

from typing import Final

import numpy as np
import numpy.typing as npt

from byway_planning.search.lattice import (
    STATES,
    advance_lattice_kernel,
    path_of,
    restart,
)
from byway_planning.search.method import Method
from byway_planning.search.question import Question
from byway_planning.search.race import FINE, Auto, scale_of
from byway_planning.search.roadmap import LazyRoadmap
from byway_planning.search.sampling import SAMPLERS
from byway_planning.search.star import StarTree
from byway_planning.search.trees import ConnectedTrees, SingleTree
from byway_planning.search.workshop import Workshop


class LatticeSearch:
    """`lattice`: one weighted search from the start; ends with its first path."""

    name = "lattice"

    def __init__(self, question: Question, workshop: Workshop, weight: float = 1.5) -> None:
        self._q = question
        self._lattice = workshop.lattice()
        cell_m, headings, arc_m = FINE
        scale = scale_of(question)
        restart(
            self._lattice,
            backward=False,
            start=question.start,
            goal=question.goal,
            cell_m=cell_m * scale,
            headings=headings,
            arc_m=arc_m * scale,
            weight=weight,
            change_m=question.body.direction_change_m,
        )

    def advance(self, iterations: int) -> int:
        q = self._q
        return int(
            advance_lattice_kernel(q.scene, q.body, self._lattice, q.to_goal, q.lengths, iterations)
        )

    def path(self) -> npt.NDArray[np.float64]:
        return path_of(self._lattice, self._q.body)

    @property
    def states_checked(self) -> int:
        return int(self._lattice.marks[STATES])


#: Methods that a replan may name, and what they are good for.
METHODS: Final[dict[str, str]] = {
    "auto": "lattices from both ends, then other corridors and polishing; the best answers",
    "lattice": "one weighted A* over position and heading; few changes of direction, no polishing",
    "rrt": "one rapidly exploring tree; simple, explores everywhere, long detours",
    "prm": "a roadmap, its curves tested when a way leads over them; goes on towards the least",
    "rrt_star": "one tree that rewires itself; slow to start, its cost goes on towards the least",
    "rrt_connect": "a tree from each end; finds ways that a lattice is too coarse for",
}


#: Those that draw samples, and so take a sampler.
SAMPLING: Final = ("rrt", "rrt_connect", "rrt_star", "prm")


def check_method(name: str, sampler: str | None) -> None:
    """
    Check a method's published name and the sampler that goes with it.

    Args:
        sampler: One of SAMPLERS, for the methods that sample; None for the method's own.

    Raises:
        ValueError: For an unknown name, or a sampler that the method has no use for.
    """
    if name not in METHODS:
        raise ValueError(f"there is no method {name!r}; known: {', '.join(sorted(METHODS))}")
    if sampler is not None and sampler not in SAMPLERS:
        raise ValueError(f"there is no sampler {sampler!r}; known: {', '.join(sorted(SAMPLERS))}")
    if sampler is not None and name not in SAMPLING:
        raise ValueError(f"method {name!r} does not sample; leave the sampler out")


def make_method(
    name: str,
    question: Question,
    sampler: str | None,
    workshop: Workshop,
    first: npt.NDArray[np.float64] | None = None,
) -> Method:
    """
    Make a search by its published name; the arguments have passed `check_method`.

    Args:
        first: A path that is known already, for the methods that can go on from one.
    """
    if name == "rrt":
        return SingleTree(question, sampler or "goal_biased")
    if name == "prm":
        return LazyRoadmap(question, sampler or "halton")
    if name == "rrt_star":
        return StarTree(question, sampler or "uniform")
    if name == "rrt_connect":
        return ConnectedTrees(question, sampler or "corridor")
    if name == "lattice":
        return LatticeSearch(question, workshop)
    return Auto(question, workshop, first)
