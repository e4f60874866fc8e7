"""Plans and outlines that several tests draw on."""

import numpy as np

from learnfilter.plan.floorplan import NO_FINISH, SHUT, WALL, FloorPlan


def outline(points):
    """[n 4] edges of the closed polygon through `points`."""
    points = np.asarray(points, float)
    return np.hstack([points, np.roll(points, -1, axis=0)])


def rectangle(left, bottom, right, top):
    """[4 4] edges, in the order bottom, right, top, left."""
    return outline([(left, bottom), (right, bottom), (right, top), (left, top)])


def plan_of(*parts, **members):
    """A plan from (segments, {kind, state, finish}) pairs; what is not said is a bare wall."""
    segments, labels = [], []
    for rows, said in parts:
        rows = np.atleast_2d(np.asarray(rows, float))
        segments.append(rows)
        label = [said.get("kind", WALL), said.get("state", SHUT), said.get("finish", NO_FINISH)]
        labels.append(np.tile(label, (len(rows), 1)))
    kind, state, finish = np.concatenate(labels).T
    segments = np.concatenate(segments)
    return FloorPlan(segments, kind, state, finish, np.arange(len(segments)), **members)


def walls(*parts, **members):
    """A plan of bare walls."""
    return plan_of(*((part, {}) for part in parts), **members)
