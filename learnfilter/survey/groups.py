"""Groups of places that look alike, and whether a move would tell them apart."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage
from scipy.sparse import coo_array, csr_array
from scipy.sparse.csgraph import connected_components, dijkstra

from learnfilter.core.poses import between, compose, inverse
from learnfilter.render.site import Site
from learnfilter.survey.evidence import Evidence
from learnfilter.survey.views import Indices, Links, Looks, Surroundings, predicted_strips

PATCH_M = 1.0  # links between poses join patches of floor this wide: smaller ones leave groups in shreds
PAIRS_TRIED = 3  # pairs of a group tried with moves; the one hardest to tell apart is reported
PROBE_DISTANCES = 8  # how far, from a step to across the site, a move is tried
PROBES_EACH = 2  # places tried at each distance
PROBE_HEADINGS = 4  # ways looked at each place


@dataclass(frozen=True, eq=False)
class Group:
    """Places that look alike.

    Attributes:
        cells: live cell numbers.
        area_m2: of the cells.
        areas: (x_m, y_m, area_m2) of each connected part, the largest first.
        fold: how many places look alike from one pose of the group, the true one included (median).
        located: posterior mass that one strip leaves at the true pose, mean over the group.
        share: of all live poses that are in it and have a look-alike.
        pair: [2 3] two poses that stand for the group, x_m, y_m, heading_rad of the sensor.
        gap_nats: evidence for the one over the other.
        move_m: how far to go from the pair until some view tells them apart, 0 where a turn on the
            spot does, inf where none of the views tried all over the site did: then only a mark helps.
    """

    cells: Indices
    area_m2: float
    areas: tuple[tuple[float, float, float], ...]
    fold: int
    located: float
    share: float
    pair: NDArray[np.float64]
    gap_nats: float
    move_m: float

    @property
    def for_ever(self) -> bool:
        """Whether no move was found that tells the pair apart."""
        return bool(np.isinf(self.move_m))


def find_groups(
    site: Site,
    evidence: Evidence,
    looks: Looks,
    links: Links,
    margin_nats: float,
    most: int,
    rng: np.random.Generator,
) -> tuple[Group, ...]:
    """Join linked patches of floor to groups; see `Survey` and `survey_site` for the arguments."""
    if not len(links.sample):
        return ()
    side = max(1, round(PATCH_M / site.grid.cell_m))
    _, patch = np.unique(site.cells // side @ [site.grid.columns, 1], return_inverse=True)
    count = int(patch.max()) + 1
    joins = (patch[looks.cell[links.sample]], patch[links.cell])
    _, label = connected_components(coo_array((np.ones(len(joins[0])), joins), shape=(count, count)))
    group_of_link = label[joins[0]]
    linked = np.unique(links.sample)
    group_of_sample = label[patch[looks.cell[linked]]]
    missed = (looks.weight * (1 - looks.located))[linked]
    lost = np.bincount(group_of_sample, weights=missed, minlength=label.max() + 1)
    roads = _roads(site)
    groups = []
    for number in np.argsort(-lost, kind="stable")[:most]:
        if lost[number] <= 0:
            break
        own, samples = np.flatnonzero(group_of_link == number), linked[group_of_sample == number]
        typical, move_m = _hardest(site, evidence, looks, links, own, roads, margin_nats, rng)
        cells = np.flatnonzero(label[patch] == number)
        weight = looks.weight[samples]
        groups.append(
            Group(
                cells=cells,
                area_m2=len(cells) * site.grid.cell_m**2,
                areas=_areas(site, cells),
                fold=1 + int(np.median(np.bincount(links.sample[own])[samples])),
                located=float(np.average(looks.located[samples], weights=weight)),
                share=float(weight.sum()),
                pair=np.stack(_ends(site, looks, links, np.array([typical])))[:, 0],
                gap_nats=float(links.gap_nats[typical]),
                move_m=move_m,
            )
        )
    return tuple(groups)


def _ends(
    site: Site, looks: Looks, links: Links, which: Indices
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """[k 3] poses at either end of some links."""
    sample = links.sample[which]
    here = _poses(site, looks.cell[sample], looks.heading[sample])
    return here, _poses(site, links.cell[which], links.heading[which])


def _hardest(
    site: Site,
    evidence: Evidence,
    looks: Looks,
    links: Links,
    own: Indices,
    roads: csr_array,
    margin_nats: float,
    rng: np.random.Generator,
) -> tuple[int, float]:
    """Of a group's typical links the one that needs the longest move, and that move."""
    poses, twins = _ends(site, looks, links, own)
    tried = []
    for i in _typical(poses, twins, links.gap_nats[own], site.grid.cell_m):
        pair = np.stack([poses[i], twins[i]])
        tried.append((int(own[i]), _telling_move(site, evidence, pair, roads, margin_nats, rng)))
    return max(tried, key=lambda each: each[1])


def _typical(
    poses: NDArray[np.float64], twins: NDArray[np.float64], gap: NDArray[np.float64], cell_m: float
) -> list[int]:
    """Links to stand for a group: of its commonest rigid motions, each time the hardest to tell.

    A symmetry of the site is one rigid motion that many look-alikes share; a chance likeness is not.
    """
    motion = compose(twins, inverse(poses))
    turned = np.exp(1j * motion[:, 2])  # half a turn either way is one
    key = np.round(np.column_stack([motion[:, :2] / cell_m + 1e-6, 8 * turned.real, 8 * turned.imag]))
    _, which, often = np.unique(key, axis=0, return_inverse=True, return_counts=True)
    typical = []
    for commonest in np.argsort(-often, kind="stable")[:PAIRS_TRIED]:
        members = np.flatnonzero(which == commonest)
        typical.append(int(members[gap[members].argmin()]))
    return typical


def _poses(site: Site, cell: Indices, heading: Indices) -> NDArray[np.float64]:
    """[k 3] of lattice poses."""
    grid = site.grid
    rows, columns = site.cells[cell].T
    return np.stack([grid.x_centres()[columns], grid.y_centres()[rows], grid.heading_centres()[heading]], 1)


def _areas(site: Site, cells: Indices) -> tuple[tuple[float, float, float], ...]:
    """Centre and area of each connected part of some cells."""
    plane = np.zeros(site.live.shape, bool)
    plane[tuple(site.cells[cells].T)] = True
    parts, count = ndimage.label(plane, np.ones((3, 3)))
    part = parts[tuple(site.cells[cells].T)]
    x, y, _ = _poses(site, cells, np.zeros(len(cells), int)).T
    cell_m2 = site.grid.cell_m**2
    areas = [
        (float(x[part == p].mean()), float(y[part == p].mean()), float((part == p).sum()) * cell_m2)
        for p in range(1, count + 1)
    ]
    return tuple(sorted(areas, key=lambda area: -area[2]))


def _roads(site: Site) -> csr_array:
    """[n n] metres between neighbouring live cells."""
    index = site.index_of()
    starts, ends, lengths = [], [], []
    for dr, dc in ((0, 1), (1, 0), (1, 1), (1, -1)):
        rows, columns = site.cells[:, 0] + dr, site.cells[:, 1] + dc
        inside = (rows < index.shape[0]) & (columns >= 0) & (columns < index.shape[1])
        end = np.where(inside, index[rows * inside, columns * inside], -1)
        starts.append(np.flatnonzero(end >= 0))
        ends.append(end[end >= 0])
        lengths.append(np.full(len(ends[-1]), site.grid.cell_m * np.hypot(dr, dc)))
    edges = (np.concatenate(starts), np.concatenate(ends))
    return csr_array((np.concatenate(lengths), edges), shape=(site.n_cells, site.n_cells))


def _telling_move(
    site: Site,
    evidence: Evidence,
    pair: NDArray[np.float64],
    roads: csr_array,
    margin_nats: float,
    rng: np.random.Generator,
) -> float:
    """Least way from the first pose of a pair after which some view tells it from the second."""
    start = int(site.nearest_live(pair[:1])[0][0])
    away = dijkstra(roads, directed=False, indices=start)
    for distance, cell in _probes(away, site.grid.cell_m, rng):
        spaced = np.arange(PROBE_HEADINGS) * site.grid.headings // PROBE_HEADINGS
        cells = np.full(len(spaced), cell)
        poses = _poses(site, cells, spaced)
        nats = evidence(*predicted_strips(site, cells, spaced))
        own = nats[np.arange(len(spaced)), cells, spaced]
        images = compose(pair[1], between(pair[0], poses))
        if (own - _best_near(site, nats, images) > margin_nats).any():
            return distance
    return float("inf")


def _probes(away: NDArray[np.float64], cell_m: float, rng: np.random.Generator) -> list[tuple[float, int]]:
    """(distance, live cell) of the places to try, the nearest first."""
    reach = away[np.isfinite(away)].max()
    probes = [(0.0, int(away.argmin()))]
    for distance in np.geomspace(2 * cell_m, max(reach, 2 * cell_m), PROBE_DISTANCES):
        ring = np.flatnonzero(np.abs(away - distance) <= cell_m)
        for cell in rng.permutation(ring)[:PROBES_EACH]:
            probes.append((float(away[cell]), int(cell)))
    return sorted(probes)


def _best_near(site: Site, nats: NDArray[np.floating], images: NDArray[np.float64]) -> NDArray[np.float64]:
    """[b] best evidence [b n h] a lattice step about poses [b 3]; -inf where nobody can stand."""
    cell, heading, own = site.nearest_live(images)
    around = Surroundings.of(site)
    reach_m, reach_rad = 1.5 * site.grid.cell_m, site.grid.heading_step_rad
    best = np.full(len(images), -np.inf)
    for i in np.flatnonzero(own):
        best[i] = nats[i][around.within(int(cell[i]), int(heading[i]), reach_m, reach_rad)].max()
    return best
