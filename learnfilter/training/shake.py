"""Strips as a worse sensor or another light would have given them: caution that sites alone do not teach.

Sites and drives are made up once and light, range and faults vary little within them, so a model learns to
trust each as far as it was right there.  Shaken strips cost nothing to make and are wrong in ways that a
robot will meet.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import torch

from learnfilter.observe.contract import Strips


@dataclass(frozen=True)
class ShakeSettings:
    """How far strips are changed; all zero changes nothing.

    Attributes:
        share: of batches that are changed at all.
        light: the light's level is multiplied by exp(u), u uniform from -light to light / 4: dimmer mostly,
            for brighter light soon saturates.
        tint: each channel likewise by exp(u), u uniform within +- tint.
        range: ranges are multiplied by 1 + u, u uniform within +- range.
        missing: up to this share of columns goes missing.
    """

    share: float = 0.0
    light: float = 0.0
    tint: float = 0.0
    range: float = 0.0
    missing: float = 0.0


def shake(strips: Strips, settings: ShakeSettings, drives: int, rng: np.random.Generator) -> Strips:
    """Change strips, each drive in a way of its own.

    Args:
        strips: [b w], of `drives` drives in turn.
        settings: how far.
        drives: number of drives.
        rng: draws the changes.
    """
    if rng.random() >= settings.share:
        return strips
    level = np.exp(rng.uniform(-settings.light, settings.light / 4, (drives, 1)))
    light = level * np.exp(rng.uniform(-settings.tint, settings.tint, (drives, 3)))
    reach = 1 + rng.uniform(-settings.range, settings.range, (drives, 1))
    lost = rng.uniform(0, settings.missing, (drives, 1))
    of = np.arange(len(strips.depth_m)) % drives
    gone = torch.from_numpy(rng.random(tuple(strips.depth_m.shape)) < lost[of])
    depth = strips.depth_m * torch.tensor(reach[of], dtype=torch.float32)
    rgb = (strips.rgb * torch.tensor(light[of][:, None], dtype=torch.float32)).clamp(max=1.0)
    return Strips(depth.masked_fill(gone, torch.nan), rgb, strips.present)
