"""Decisions about made-up outlooks, for the training of policies."""

import numpy as np

from learnfilter.movers.policy import Decision
from learnfilter.runtime.outlook import CHANNELS, MODES, SECTORS, Outlook

MOTIONS = np.array([[0.5, 0.0, 0.0], [0.0, 0.0, np.pi / 2], [0.0, 0.0, -np.pi / 2]])


def decision(rng, choice=0):
    """Two places that promise anything after each motion."""
    view = np.zeros((MODES, len(MOTIONS), SECTORS * CHANNELS), np.float32)
    view[:2] = rng.random((2, len(MOTIONS), SECTORS * CHANNELS))
    share, place = np.zeros(MODES, np.float32), np.zeros((MODES, 4), np.float32)
    share[:2] = [0.6, 0.4]
    place[:2] = [[0, 0, 1, 0], [3, -1, -1, 0]]
    seen = rng.random(SECTORS * CHANNELS).astype(np.float32)
    return Decision(Outlook(share, place, view, seen, 0.3), np.zeros(3), np.ones(len(MOTIONS), bool), choice)
