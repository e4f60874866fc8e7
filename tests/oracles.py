"""Slow, obvious answers that share no code with learnfilter."""

import itertools

import numpy as np


def brute_force_belief(prior, step, log_likelihoods):
    """Belief at the last time by adding up every path.

    Args:
        prior: [n] before the first likelihood.
        step: [n n] probability of going from row to column between likelihoods; rows may sum to less
            than one where paths end.
        log_likelihoods: [t n].
    """
    belief = np.zeros(len(prior))
    for path in itertools.product(range(len(prior)), repeat=len(log_likelihoods)):
        moved = np.prod([step[a, b] for a, b in itertools.pairwise(path)])
        seen = np.exp(sum(row[cell] for row, cell in zip(log_likelihoods, path, strict=True)))
        belief[path[-1]] += prior[path[0]] * moved * seen
    return belief / belief.sum()


def ring_sums(table, ring, first, per_heading, headings):
    """[b n h] evidence of strips along rings, one reading at a time."""
    strips, columns, _ = table.shape
    out = np.zeros((strips, len(ring), headings))
    for b, n, h, w in np.ndindex(strips, len(ring), headings, columns):
        out[b, n, h] += table[b, w, ring[n, (h * per_heading + first + w) % ring.shape[1]]]
    return out


def ring_products(phi, psi, first, per_heading, headings):
    """[b n h] inner products of strips [b w f] with rings [n p f], one window at a time."""
    columns, bearings = phi.shape[1], psi.shape[1]
    out = np.zeros((len(phi), len(psi), headings))
    for h in range(headings):
        window = (h * per_heading + first + np.arange(columns)) % bearings
        out[:, :, h] = np.einsum("bwf,nwf->bn", phi, psi[:, window])
    return out


def particle_drive(poses, motion, steps, spreads, rng):
    """Carry particles [k 3] (x, y, heading) through the same odometry again and again.

    Each reading's travel gets noise along and across, its turn gets noise as well; the shift happens
    under the old heading.

    Args:
        motion: forward_m, left_m, turn_rad of one reading.
        spreads: standard deviations of turn a radian, turn a metre, travel a metre, travel a radian.
    """
    turn_turn, turn_travel, travel_travel, travel_turn = spreads
    forward, left, turn = motion
    travel = np.hypot(forward, left)
    sd_travel = np.hypot(travel_travel * travel, travel_turn * turn)
    sd_turn = np.hypot(turn_turn * turn, turn_travel * travel)
    x, y, heading = np.array(poses, float).T
    for _ in range(steps):
        f, s = forward + sd_travel * rng.normal(size=len(x)), left + sd_travel * rng.normal(size=len(x))
        x, y = x + f * np.cos(heading) - s * np.sin(heading), y + f * np.sin(heading) + s * np.cos(heading)
        heading = heading + turn + sd_turn * rng.normal(size=len(x))
    return np.stack([x, y, heading], axis=1)
