"""A path along cell faces that cuts the copper where a neck is marked, and lets no current slip past."""

from __future__ import annotations

import numpy as np
from scipy.sparse import csr_array
from scipy.sparse.csgraph import dijkstra

from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.physics.sheet_grid import SHORTEST, Faces
from archopt.physics.sheet_shape import SheetError, distance_to_segments, edges

#: How far beside the marked line the path may run, how dear that is, and how dear distance from its ends is.
CORRIDOR = 3.0
ASIDE_COST = 4.0
END_COST = 10.0
#: A face's end nearer to an edge than this lies on it (pitches).
ON_EDGE = 1e-5


def cut_along(
    faces: Faces, usable: BoolArray, polygons: list[FloatArray], start: FloatArray, end: FloatArray
) -> tuple[IntArray, FloatArray]:
    """Faces that cut the copper between two points of its edge.

    Parameters
    ----------
    faces : F stretches of cell face
    usable : shape (F,), faces the path may take; those at pads are not
    polygons : outline and cut-outs, corners of shape (N, 2) (pitches)
    start, end : the points, shape (2,) (pitches)

    Returns
    -------
    Numbers of the faces, and for each +1 where its forward current passes from the right of the path to the
    left, -1 where it passes the other way.

    Raises
    ------
    SheetError
        If the grid is too coarse to see the edges at the points.

    Notes
    -----
    The cheapest path (Dijkstra) over grid crossings in copper, from an end of a face on the edge at the first
    point to one on the edge at the second. Whatever path is taken, what passes it is the same (Kirchhoff) as
    long as no pad lies between.
    """
    near = np.flatnonzero(usable & (distance_to_segments(faces.middle, start, end) < CORRIDOR))
    along_y = faces.axis[near] == 0
    half = 0.5 * faces.length[near, None] * np.where(along_y[:, None], [0.0, 1.0], [1.0, 0.0])
    tips = np.stack([faces.middle[near] - half, faces.middle[near] + half], axis=1).reshape(-1, 2)
    open_tip: BoolArray = np.abs(tips - np.round(tips)).max(axis=1, initial=0.0) >= SHORTEST
    # faces meet at grid crossings; a tip on the edge of the copper is a place of its own
    named = np.concatenate(
        [np.round(tips), np.where(open_tip, np.arange(1, len(tips) + 1), 0)[:, None]], axis=1
    )
    _, place = np.unique(named, axis=0, return_inverse=True)
    place = place.ravel().astype(np.int_)
    source = int(place.max(initial=-1)) + 1
    aside = distance_to_segments(faces.middle[near], start, end)
    cost = faces.length[near] * (1.0 + ASIDE_COST * aside**2)
    joint, joint_cost = _tips_at_ends(tips, open_tip, polygons, np.stack([start, end]))
    rows = np.concatenate([place[0::2], np.full(len(joint[0]), source), place[joint[1]]])
    columns = np.concatenate([place[1::2], place[joint[0]], np.full(len(joint[1]), source + 1)])
    costs = np.concatenate([cost, *joint_cost])
    both = csr_array((costs, (rows, columns)), shape=(source + 2, source + 2))
    lengths, befores = dijkstra(both, directed=False, indices=np.array([source]), return_predecessors=True)
    before = befores[0].astype(np.int_)
    if not np.isfinite(lengths[0, source + 1]):
        raise SheetError("the grid does not follow the copper at the neck; use a finer pitch")
    return _walk_back(place.reshape(-1, 2), near, along_y, before, source)


def _tips_at_ends(
    tips: FloatArray, open_tip: BoolArray, polygons: list[FloatArray], ends: FloatArray
) -> tuple[list[IntArray], list[FloatArray]]:
    """Tips of faces on the same edge as either end, nearer to it than to the other; what each costs."""
    distance = np.linalg.norm(tips[None] - ends[:, None], axis=2)
    gap = np.array(
        [[distance_to_segments(end, *edges(polygon)).min() for polygon in polygons] for end in ends]
    )
    tip_numbers: list[IntArray] = []
    costs: list[FloatArray] = []
    for number in (0, 1):
        reach = open_tip & (distance[number] < CORRIDOR) & (distance[number] <= distance[1 - number])
        index = np.flatnonzero(reach)
        on_edge = np.zeros(len(index), dtype=bool)
        for polygon in np.flatnonzero(gap[number] < ON_EDGE):
            on_edge |= (
                distance_to_segments(tips[index, None], *edges(polygons[polygon])).min(axis=1, initial=np.inf)
                < ON_EDGE
            )
        tip_numbers.append(index[on_edge])
        costs.append(SHORTEST + END_COST * distance[number, index[on_edge]])
    return tip_numbers, costs


def _walk_back(
    place: IntArray, near: IntArray, along_y: BoolArray, before: IntArray, source: int
) -> tuple[IntArray, FloatArray]:
    """Faces on the path found and the sense in which current passes each."""
    by_places = {(int(low), int(high)): index for index, (low, high) in enumerate(place)}
    found, sense = [], []
    onward = int(before[source + 1])
    while (back := int(before[onward])) != source:
        upward = (back, onward) in by_places
        index = by_places[(back, onward) if upward else (onward, back)]
        found.append(int(near[index]))
        # walking along +y, left is -x; walking along +x, left is +y
        sense.append(1.0 if upward != bool(along_y[index]) else -1.0)
        onward = back
    return np.array(found, dtype=np.int_), np.array(sense)
