"""Find places whose views the robot cannot tell apart.

At sampled poses the strip that the plan predicts is weighed against every live pose, as a filter that
knows nothing yet would.  What is left elsewhere is ambiguity of the site itself: no training removes
it, only a move or a mark does.  The strip is free of noise; how much noise there will be is what the
evidence allows for.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from learnfilter.core.errors import ConfigError
from learnfilter.core.estimate import NEAR_M, NEAR_RAD
from learnfilter.core.shapes import check
from learnfilter.render.site import Site
from learnfilter.survey.evidence import Evidence
from learnfilter.survey.groups import Group, find_groups
from learnfilter.survey.views import Indices, Links, Looks, Surroundings, predicted_strips

# Poses farther apart than either are different places; nearer ones are each other's flanks.
FAR_M, FAR_RAD = 1.0, np.radians(30.0)
MOST_ALIKE = 24  # look-alikes written down for one pose; the rest of the mass is kept as one number
HEADINGS_SAMPLED = 4  # for one cell of a sampled site: more cells tell more than more headings
MOST_AT_ONCE = 8_000_000  # log-likelihoods held at once: the survey's memory, 4 bytes each
MOST_STRIPS = 64  # weighed at once on a small site: their tables take memory too


@dataclass(frozen=True, eq=False)
class Survey:
    """What one strip tells a robot that has just woken up on a site.

    Attributes:
        looks: [s] sampled poses and what a strip leaves there.
        links: [l] their look-alikes.
        exhaustive: whether every live pose was sampled.
        ambiguity: [r c] posterior mass that is not near the true pose, mean over headings; NaN where
            not live.
        groups: places that look alike, the most ambiguous first.
        margin_nats: evidence within which two views count as alike.
    """

    looks: Looks
    links: Links
    exhaustive: bool
    ambiguity: NDArray[np.float64]
    groups: tuple[Group, ...]
    margin_nats: float

    @property
    def located_share(self) -> float:
        """Posterior mass that one strip leaves at the true pose, mean over the site."""
        return float(self.looks.weight @ self.looks.located)

    @property
    def alike(self) -> Indices:
        """[s] number of far places that look like each sampled pose, at most `MOST_ALIKE`."""
        return np.bincount(self.links.sample, minlength=len(self.looks.cell))

    @property
    def alike_share(self) -> float:
        """Share of the site's poses that have a look-alike far away."""
        return float(self.looks.weight @ (self.alike > 0))


def survey_site(
    site: Site,
    evidence: Evidence,
    *,
    budget: int = 512,
    margin_nats: float = 3.0,
    most_groups: int = 8,
    rng: np.random.Generator,
    tick: Callable[[int, int, str], None] = lambda done, total, what: None,
) -> Survey:
    """Look for look-alike poses on a site.

    Args:
        site: the rendered plan.
        evidence: how a model, or RingComparison, judges strips on this site.
        budget: poses to sample at most; where the site has no more, all are taken.
        margin_nats: a look-alike is this near in evidence; 3 nats are odds of 20 to 1.
        most_groups: groups to report at most.
        rng: draws sampled poses and probes.
        tick: told (done, total, what) as the work goes on.

    Returns:
        The survey.

    Raises:
        ConfigError: budget or margin is not positive.
        ShapeError: the evidence does not fit the site.
    """
    if budget < 1 or margin_nats <= 0:
        raise ConfigError("out of range", place="survey", expected="a positive budget and margin")
    cell, heading, block = _sample(site, budget, rng)
    around = Surroundings.of(site)
    found = []
    for i, weighed in _weighed(site, evidence, cell, heading):
        found.append(_look(weighed, cell[i], heading[i], around, margin_nats))
        tick(i + 1, len(cell), "poses")
    located, entropy, rest = (np.array(column) for column in zip(*((f[:3]) for f in found), strict=True))
    samples = np.bincount(block[cell])  # in each block
    weight = (np.bincount(block) / samples)[block[cell]] / site.n_cells
    looks = Looks(cell, heading, weight, located, entropy, rest)
    links = _links(found)
    ambiguity = np.full(site.live.shape, np.nan)
    missed = np.bincount(block[cell], weights=1 - located) / samples
    ambiguity[tuple(site.cells.T)] = missed[block]
    return Survey(
        looks=looks,
        links=links,
        exhaustive=len(cell) == site.n_cells * site.grid.headings,
        ambiguity=ambiguity,
        groups=find_groups(site, evidence, looks, links, margin_nats, most_groups, rng),
        margin_nats=margin_nats,
    )


def _sample(site: Site, budget: int, rng: np.random.Generator) -> tuple[Indices, Indices, Indices]:
    """Sampled cells and headings [s], and the block of each live cell [n]: every block has samples.

    Blocks are squares, the smallest that the budget allows; in each a cell is drawn, and headings
    evenly spaced from one that is drawn.
    """
    headings = site.grid.headings
    if site.n_cells * headings <= budget:
        cell, heading = np.divmod(np.arange(site.n_cells * headings), headings)
        return cell, heading, np.arange(site.n_cells)
    each = min(HEADINGS_SAMPLED, headings, budget)
    side = 1
    while True:
        _, block = np.unique(site.cells // side @ [site.grid.columns, 1], return_inverse=True)
        if (count := int(block.max()) + 1) <= max(budget // each, 1):
            break
        side += 1
    shuffled = rng.permutation(site.n_cells)
    cell = shuffled[np.unique(block[shuffled], return_index=True)[1]]
    spaced = np.arange(each) * headings // each
    heading = (rng.integers(headings, size=(count, 1)) + spaced) % headings
    return np.repeat(cell, each), heading.ravel(), block


def _weighed(
    site: Site, evidence: Evidence, cell: Indices, heading: Indices
) -> Iterator[tuple[int, NDArray[np.floating]]]:
    """Yield each pose's number with the evidence [n h] of the strip predicted there."""
    batch = min(max(MOST_AT_ONCE // (site.n_cells * site.grid.headings), 1), MOST_STRIPS)
    for first in range(0, len(cell), batch):
        part = slice(first, first + batch)
        nats = evidence(*predicted_strips(site, cell[part], heading[part]))
        check("evidence", nats, "b n h", b=len(cell[part]), n=site.n_cells, h=site.grid.headings)
        yield from enumerate(nats, first)


class _Found(NamedTuple):
    """One strip's posterior, taken apart; `links` are (cell, heading, gap_nats, ratio)."""

    located: float
    entropy: float
    rest: float
    links: list[tuple[int, int, float, float]]


def _links(found: list[_Found]) -> Links:
    sample = np.repeat(np.arange(len(found)), [len(f.links) for f in found])
    rows = np.array([link for f in found for link in f.links]).reshape(-1, 4)
    return Links(sample, rows[:, 0].astype(int), rows[:, 1].astype(int), rows[:, 2], rows[:, 3])


def _look(
    nats: NDArray[np.floating], cell: int, heading: int, around: Surroundings, margin_nats: float
) -> _Found:
    """The posterior [n h] of one strip from an unknown start, taken apart into places."""
    own = float(nats[cell, heading])
    mass = np.exp(nats.astype(float) - float(nats.max()))
    mass /= mass.sum()
    entropy = -float((mass * np.log(np.maximum(mass, 1e-300))).sum())
    located = float(mass[around.within(cell, heading, NEAR_M, NEAR_RAD)].sum())
    left = np.where(nats >= own - margin_nats, nats, -np.inf)
    here = around.within(cell, heading, FAR_M, FAR_RAD)
    left[here] = -np.inf
    own_mass = max(float(mass[here].sum()), 1e-30)  # none is left where evidence is surest of elsewhere
    mass[here] = 0.0
    links = []
    for _ in range(MOST_ALIKE):
        peak = np.unravel_index(int(left.argmax()), left.shape)
        if left[peak] == -np.inf:
            break
        there = around.within(int(peak[0]), int(peak[1]), FAR_M, FAR_RAD)
        gap, ratio = own - float(left[peak]), float(mass[there].sum()) / own_mass
        links.append((int(peak[0]), int(peak[1]), gap, ratio))
        left[there], mass[there] = -np.inf, 0.0
    return _Found(located, entropy, float(mass.sum()) / own_mass, links)
