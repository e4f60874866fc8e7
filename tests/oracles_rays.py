"""A slow, obvious ray caster in NumPy that shares no code with learnfilter."""

import numpy as np


def brute_force(segments, x, y, angle, max_range_m):
    """Range [k] float64 (inf where nothing) by meeting every ray with every segment.

    Solves origin + t u = start + v (end - start) for all pairs; a segment counts as 1e-9 of its
    length longer at either end, so that rays aimed at a joint meet one of the two.
    """
    segments = np.asarray(segments, float).reshape(-1, 4)
    best = np.full(len(x), np.inf)
    ray = np.stack([np.cos(angle), np.sin(angle)], axis=1)
    for x0, y0, x1, y1 in segments:
        matrix = np.empty((len(x), 2, 2))
        matrix[:, :, 0] = ray
        matrix[:, :, 1] = [x0 - x1, y0 - y1]
        determinant = matrix[:, 0, 0] * matrix[:, 1, 1] - matrix[:, 0, 1] * matrix[:, 1, 0]
        met = determinant != 0
        offset = np.stack([x0 - x[met], y0 - y[met]], axis=1)
        t, v = np.linalg.solve(matrix[met], offset[:, :, None])[:, :, 0].T
        t[(t < 0) | (v < -1e-9) | (v > 1 + 1e-9) | (t >= max_range_m)] = np.inf
        best[met] = np.minimum(best[met], t)
    return best
