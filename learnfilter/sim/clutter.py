"""Things that stand about and people who walk about: what no plan shows."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.colour import srgb_to_linear
from learnfilter.sim.finishes import CLOTHES_SRGB, FURNITURE
from learnfilter.sim.free import CELL_M, clearance

SIDE_M = (0.3, 1.2)
CHAIR_M = (0.35, 0.5)
CLUSTER_SHARE = 0.3
# Most things stand square to the walls, a little off.
SQUARE_SHARE = 0.7
SQUARE_SPREAD_RAD = 0.05
# Things leave so much of a doorway free that a robot gets through.
DOORWAY_M = 0.9
WALL_GAP_M = 0.03
TRIES = 20

PERSON_RADIUS_M = 0.25
WALK_M = (1.0, 5.0)
WALK_SPEED = (0.3, 1.2)


def box_outline(place: NDArray[np.float64], size: NDArray[np.float64], turn: float) -> NDArray[np.float64]:
    """[4 2] corners, counter-clockwise, of a box about its place [2], sides [2] in metres."""
    along = 0.5 * size[0] * np.array([np.cos(turn), np.sin(turn)])
    across = 0.5 * size[1] * np.array([-np.sin(turn), np.cos(turn)])
    return place + np.array([-along - across, along - across, along + across, across - along])


def outline_edges(outline: NDArray[np.float64]) -> NDArray[np.float64]:
    """[k 4] edges of a closed outline [k 2]."""
    return np.hstack([outline, np.roll(outline, -1, axis=0)])


def furnish(
    floor: NDArray[np.float64],
    barriers: NDArray[np.float64],
    doorways: NDArray[np.float64],
    mean_count: float,
    rng: np.random.Generator,
) -> tuple[list[NDArray[np.float64]], NDArray[np.int64]]:
    """Stand things on the floor: boxes, and clusters of small ones like chairs round a table.

    Args:
        floor: [k 2] places of free floor to choose from.
        barriers: [n 4] what things may not touch.
        doorways: [m 4] lines kept free.
        mean_count: expected number of things; their number is Poisson.

    Returns:
        Outlines [4 2] of boxes (fewer where the floor is full) and a finish of FURNITURE for each.
    """
    outlines: list[NDArray[np.float64]] = []
    finishes: list[int] = []
    for _ in range(rng.poisson(mean_count) if len(floor) else 0):
        finish = int(rng.integers(len(FURNITURE)))
        for _ in range(TRIES):
            place = floor[rng.integers(len(floor))] + rng.uniform(-CELL_M / 2, CELL_M / 2, 2)
            fitting = [o for o in _thing(place, rng) if _fits(o, place, barriers, doorways)]
            if fitting:
                outlines += fitting
                finishes += [finish] * len(fitting)
                break
    return outlines, np.array(finishes, dtype=np.int64)


def _thing(place: NDArray[np.float64], rng: np.random.Generator) -> list[NDArray[np.float64]]:
    """One box, or two to four small ones around the place."""
    if rng.random() >= CLUSTER_SHARE:
        square = rng.random() < SQUARE_SHARE
        turn = rng.normal(0, SQUARE_SPREAD_RAD) if square else rng.uniform(-np.pi, np.pi)
        return [box_outline(place, rng.uniform(*SIDE_M, 2), turn)]
    count = int(rng.integers(2, 5))
    angles = rng.uniform(0, 2 * np.pi) + 2 * np.pi / count * np.arange(count)
    centres = place + 0.6 * np.stack([np.cos(angles), np.sin(angles)], axis=1)
    return [box_outline(centre, rng.uniform(*CHAIR_M, 2), rng.uniform(-np.pi, np.pi)) for centre in centres]


def _fits(
    outline: NDArray[np.float64],
    place: NDArray[np.float64],
    barriers: NDArray[np.float64],
    doorways: NDArray[np.float64],
) -> bool:
    """Whether a box touches nothing, stands on the place's side of every wall and leaves doorways free."""
    lines = np.vstack(
        [
            outline_edges(outline),
            outline[[0, 2]].reshape(1, 4),
            outline[[1, 3]].reshape(1, 4),
            np.append(place, outline.mean(axis=0)),
        ]
    )
    return all(
        clearance(*line, barriers) >= WALL_GAP_M and clearance(*line, doorways) >= DOORWAY_M for line in lines
    )


@dataclass(frozen=True, eq=False)
class People:
    """Walkers, each to and fro along a clear line; discs seen from a strip's height.

    Attributes:
        ends: [n 2 2] both ends (x, y) of each line, metres.
        speed: [n] metres a second.
        phase: [n] place on the way there and back at time 0, in [0, 2).
        linear_rgb: [n 3] of their clothes.
    """

    ends: NDArray[np.float64]
    speed: NDArray[np.float64]
    phase: NDArray[np.float64]
    linear_rgb: NDArray[np.float64]

    def at(self, time_s: NDArray[np.float64]) -> NDArray[np.float64]:
        """[t n 2] where they are."""
        length = np.linalg.norm(self.ends[:, 1] - self.ends[:, 0], axis=1)
        lap = (self.phase + np.multiply.outer(time_s, self.speed / length)) % 2
        share = np.minimum(lap, 2 - lap)[..., None]
        return self.ends[:, 0] + share * (self.ends[:, 1] - self.ends[:, 0])

    def rims(self, time_s: float) -> list[NDArray[np.float64]]:
        """Outlines [8 2] round each of them, nowhere nearer than a person's radius."""
        angles = 2 * np.pi * np.arange(8) / 8
        rim = PERSON_RADIUS_M / np.cos(np.pi / 8) * np.stack([np.cos(angles), np.sin(angles)], axis=1)
        return [place + rim for place in self.at(np.array([time_s]))[0]]


def draw_people(
    count: int, floor: NDArray[np.float64], barriers: NDArray[np.float64], rng: np.random.Generator
) -> People:
    """People who walk between places of the floor [k 2]; fewer than `count` where hardly a line is clear."""
    ends: list[tuple[NDArray, NDArray]] = []
    for _ in range(count * TRIES if len(floor) else 0):
        a, b = floor[rng.integers(len(floor), size=2)]
        clear = WALK_M[0] <= np.linalg.norm(b - a) <= WALK_M[1]
        if clear and clearance(*a, *b, barriers) >= PERSON_RADIUS_M:
            ends.append((a, b))
        if len(ends) == count:
            break
    n = len(ends)
    clothes = srgb_to_linear(np.array(CLOTHES_SRGB)[rng.integers(len(CLOTHES_SRGB), size=n)])
    return People(np.array(ends).reshape(n, 2, 2), rng.uniform(*WALK_SPEED, n), rng.uniform(0, 2, n), clothes)
