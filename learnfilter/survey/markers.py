"""Which stretches of wall to paint so that places stop looking alike.

Candidates are pieces of wall about a metre long, each face apart.  Painting one changes the columns
that see it, at a pose and at its look-alikes; a column that shows the paint at one but not at the
other costs the look-alike a few nats.  Stretches are taken one by one, each time the one after which
most posterior mass lies at the true pose.  The survey's links are kept, not searched again: paint the
site (`paint`) and survey it once more for the numbers after.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, replace
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.colour import srgb_to_linear
from learnfilter.core.errors import ConfigError
from learnfilter.plan.floorplan import SOLID, WALL, FloorPlan
from learnfilter.render import build_scene, cast_fan
from learnfilter.render.site import Site
from learnfilter.survey.lookalike import Survey
from learnfilter.survey.views import Indices, columns_of

STRETCH_M = 1.0
LEAST_M = 0.3  # shorter pieces of wall are not worth a bucket of paint
LEAST_GAIN = 1e-4  # mean posterior mass; a marker that adds less is not worth naming
SAME_RANGE_M = 0.01  # a ray that ends elsewhere than at the wall does not see the paint
PAINTS = {
    "red": (0.8, 0.08, 0.08),
    "blue": (0.05, 0.2, 0.75),
    "yellow": (0.95, 0.8, 0.05),
    "green": (0.05, 0.55, 0.2),
    "violet": (0.5, 0.1, 0.6),
}  # no dark paint: depth sensors get little back from it (Kneip et al. 2009)


@dataclass(frozen=True)
class Marker:
    """One stretch of wall to paint.

    Attributes:
        segment: [4] x0 y0 x1 y1 of the stretch, metres; the painted face is on its left.
        feature: which feature of the plan's file the wall is.
        located_share: posterior mass at the true pose, mean over the site, once this and the markers
            before it are painted; an estimate.
    """

    segment: tuple[float, float, float, float]
    feature: int
    located_share: float


def contrasting(site: Site) -> tuple[str, tuple[float, float, float]]:
    """Name and sRGB of the paint that differs most from every finish of the plan, in log colour."""

    def logs(linear: NDArray) -> NDArray:
        return np.log(np.asarray(linear) + 0.02)

    finishes = logs(site.palette) if len(site.palette) else logs(np.full((1, 3), 0.5))  # else a grey wall
    apart = {
        name: float(np.linalg.norm(finishes - logs(srgb_to_linear(srgb)), axis=1).min())
        for name, srgb in PAINTS.items()
    }
    best = max(apart, key=lambda name: apart[name])
    return best, PAINTS[best]


def advise(
    survey: Survey, site: Site, plan: FloorPlan, count: int, nats_a_column: float
) -> tuple[Marker, ...]:
    """The stretches to paint in one contrasting colour, the best first.

    Args:
        survey: of the site.
        site: the rendered plan.
        plan: whose walls.
        count: markers wanted; fewer come back where no more help.
        nats_a_column: what a column costs that shows paint where there is none or none where there is;
            `RingComparison.nats_a_column` where no model says it.

    Raises:
        ConfigError: `nats_a_column` is not positive: a sensor without colour sees no paint.
    """
    if nats_a_column <= 0:
        raise ConfigError("paint tells this sensor nothing", place="survey", expected="a sensor with colour")
    pieces, feature = _pieces(plan)
    if not len(pieces):
        return ()
    painting = _Painting.of(survey, site, _faces(site, pieces))
    chosen: list[Marker] = []
    for _ in range(count):
        gain = _gains(survey, painting, nats_a_column, 2 * len(pieces))
        best = int(gain.argmax())
        if gain[best] < LEAST_GAIN:
            break
        painting = painting.painted(best)
        after = _located(survey, survey.links.ratio * np.exp(-nats_a_column * painting.told().sum(axis=1)))
        number, right = divmod(best, 2)
        x0, y0, x1, y1 = map(float, pieces[number])
        segment = (x1, y1, x0, y0) if right else (x0, y0, x1, y1)
        chosen.append(Marker(segment, int(feature[number]), float(survey.looks.weight @ after)))
    return tuple(chosen)


def paint(site: Site, markers: Sequence[Marker], srgb: tuple[float, float, float]) -> Site:
    """The site with markers painted: other finishes, the same ranges."""
    face = _faces(site, np.array([marker.segment for marker in markers]).reshape(-1, 4))
    linear = srgb_to_linear(srgb).astype(np.float32)
    said = repr((site.key, [marker.segment for marker in markers], srgb))
    return replace(
        site,
        finish=np.where((face >= 0) & (face % 2 == 0), np.int16(len(site.palette)), site.finish),
        palette=np.vstack([site.palette.reshape(-1, 3), linear]),
        key=hashlib.sha256(said.encode()).hexdigest(),
    )


def _pieces(plan: FloorPlan) -> tuple[NDArray[np.float64], NDArray[np.int32]]:
    """[k 4] stretches of wall and of solid things, and [k] the features they are of."""
    pieces, feature = [], []
    paintable = (plan.kind == WALL) | (plan.kind == SOLID)
    for line, number in zip(plan.segments[paintable], plan.feature[paintable], strict=True):
        start, way = line[:2], line[2:] - line[:2]
        if np.hypot(*way) < LEAST_M:
            continue
        ends = np.linspace(0, 1, max(1, round(float(np.hypot(*way)) / STRETCH_M)) + 1)
        for a, b in pairwise(ends):
            pieces.append(np.concatenate([start + a * way, start + b * way]))
            feature.append(number)
    return np.array(pieces).reshape(-1, 4), np.array(feature, dtype=np.int32)


def _faces(site: Site, pieces: NDArray[np.float64]) -> Indices:
    """[n p] face that each ring bearing sees: 2 k and 2 k + 1 are left and right of piece k, -1 none."""
    x, y = site.grid.x_centres()[site.cells[:, 1]], site.grid.y_centres()[site.cells[:, 0]]
    range_m, piece = cast_fan(build_scene(pieces), x, y, site.layout.ring_angles(), site.max_range_m)
    with np.errstate(invalid="ignore"):  # both are inf where nothing is met
        seen = (np.abs(range_m - site.range_m) < SAME_RANGE_M) & ~site.unsure
    x0, y0, x1, y1 = pieces[piece].transpose(2, 0, 1) if len(pieces) else np.zeros((4, *piece.shape))
    right = (x1 - x0) * (y[:, None] - y0) < (y1 - y0) * (x[:, None] - x0)
    return np.where(seen, 2 * piece.astype(np.int64) + right, -1)


@dataclass(frozen=True, eq=False)
class _Painting:
    """Faces that each column sees, for every link: at the sampled pose and at its look-alike.

    Attributes:
        own, other: [l w] face, -1 none.
        known: [l w] whether the plan knows the finish that the sampled pose sees: bare wall of unknown
            colour says nothing against paint.
        own_painted, other_painted: [l w] which of them show paint.
    """

    own: Indices
    other: Indices
    known: NDArray[np.bool_]
    own_painted: NDArray[np.bool_]
    other_painted: NDArray[np.bool_]

    @classmethod
    def of(cls, survey: Survey, site: Site, faces: Indices) -> _Painting:
        looks, links = survey.looks, survey.links
        present = site.layout.present()
        here = looks.cell[links.sample][:, None], columns_of(site, looks.heading[links.sample])
        there = links.cell[:, None], columns_of(site, links.heading)
        own, other = (np.where(present, faces[rays], -1) for rays in (here, there))
        bare = np.zeros(own.shape, bool)
        return cls(own, other, site.finish[here] >= 0, bare, bare)

    def painted(self, face: int) -> _Painting:
        return replace(
            self,
            own_painted=self.own_painted | (self.own == face),
            other_painted=self.other_painted | (self.other == face),
        )

    def told(self) -> NDArray[np.bool_]:
        """[l w] columns that speak against the look-alike."""
        return _tells(self.own_painted, self.other_painted, self.known)

    def changes(self) -> tuple[Indices, Indices, Indices]:
        """Link, face and change of `told` for every column that painting one more face would change."""
        before = self.told().astype(int)
        apart = self.own != self.other  # a face in the same column of both changes neither
        rows, faces, changes = [], [], []
        for side, after in (
            (self.own, _tells(True, self.other_painted, self.known)),
            (self.other, _tells(self.own_painted, True, self.known)),
        ):
            change = after.astype(int) - before
            row, column = np.nonzero(apart & (side >= 0) & (change != 0))
            rows.append(row)
            faces.append(side[row, column])
            changes.append(change[row, column])
        return np.concatenate(rows), np.concatenate(faces), np.concatenate(changes)


def _tells(own_painted, other_painted, known: NDArray[np.bool_]) -> NDArray[np.bool_]:
    return (own_painted & ~np.asarray(other_painted)) | (other_painted & ~np.asarray(own_painted) & known)


def _elsewhere(survey: Survey, ratio: NDArray[np.float64]) -> NDArray[np.float64]:
    """[s] posterior mass elsewhere over that about the true pose, for mass ratios of the links [l]."""
    return survey.looks.rest + np.bincount(survey.links.sample, ratio, len(survey.looks.cell))


def _located(survey: Survey, ratio: NDArray[np.float64]) -> NDArray[np.float64]:
    """[s] posterior mass at the true pose for mass ratios of the links [l]."""
    return (
        survey.looks.located * (1 + _elsewhere(survey, survey.links.ratio)) / (1 + _elsewhere(survey, ratio))
    )


def _gains(survey: Survey, painting: _Painting, nats_a_column: float, faces: int) -> NDArray[np.float64]:
    """[faces] what painting one more face adds to the mean mass at the true pose."""
    ratio = survey.links.ratio * np.exp(-nats_a_column * painting.told().sum(axis=1))
    link, face, change = painting.changes()
    pairs, which = np.unique(link * faces + face, return_inverse=True)  # a face in several columns
    link, face = np.divmod(pairs, faces)
    added = ratio[link] * np.expm1(-nats_a_column * np.bincount(which, change, len(pairs)))
    sample = survey.links.sample[link]
    pairs, which = np.unique(sample * faces + face, return_inverse=True)  # look-alikes of one pose
    sample, face = np.divmod(pairs, faces)
    before = 1 + _elsewhere(survey, ratio)[sample]
    after = before + np.bincount(which, added, len(pairs))
    now = (survey.looks.weight * _located(survey, ratio))[sample]
    return np.bincount(face, now * (before / after - 1), faces).astype(float)
