"""Colours of invented surfaces.

The values are judgements by eye, sRGB in [0, 1]; no source.  `UNSEEN` shares no colour with
`USUAL`, so that a model trained on the one can be tried on the other.
"""

from __future__ import annotations

from learnfilter.plan.floorplan import Finish

USUAL = (
    Finish("white paint", (0.92, 0.91, 0.88)),
    Finish("grey paint", (0.60, 0.61, 0.62)),
    Finish("beech", (0.80, 0.64, 0.45)),
    Finish("oak", (0.55, 0.40, 0.25)),
    Finish("blue panel", (0.20, 0.38, 0.65)),
    Finish("brick", (0.60, 0.29, 0.22)),
    Finish("green tile", (0.35, 0.60, 0.45)),
    Finish("steel", (0.48, 0.52, 0.56)),
    Finish("yellow rail", (0.90, 0.75, 0.15)),
    Finish("red door", (0.72, 0.14, 0.12)),
    Finish("anthracite", (0.18, 0.19, 0.20)),
)
UNSEEN = (
    Finish("cream plaster", (0.93, 0.86, 0.70)),
    Finish("terracotta", (0.79, 0.45, 0.33)),
    Finish("teal laminate", (0.10, 0.48, 0.50)),
    Finish("violet felt", (0.45, 0.32, 0.60)),
    Finish("olive paint", (0.42, 0.44, 0.20)),
    Finish("sky paint", (0.55, 0.75, 0.90)),
    Finish("slate", (0.26, 0.30, 0.33)),
    Finish("rose paint", (0.85, 0.60, 0.62)),
    Finish("copper sheet", (0.70, 0.43, 0.27)),
    Finish("lime gloss", (0.62, 0.80, 0.25)),
    Finish("pine", (0.84, 0.72, 0.50)),
)
PALETTES = {"usual": USUAL, "unseen": UNSEEN}
# What stands about and what people wear.
FURNITURE = (
    Finish("cardboard", (0.66, 0.50, 0.33)),
    Finish("black fabric", (0.10, 0.10, 0.11)),
    Finish("light veneer", (0.78, 0.70, 0.58)),
    Finish("white gloss", (0.94, 0.94, 0.95)),
    Finish("grey plastic", (0.45, 0.46, 0.47)),
    Finish("navy fabric", (0.13, 0.17, 0.33)),
    Finish("orange plastic", (0.88, 0.42, 0.12)),
    Finish("green leaves", (0.22, 0.42, 0.16)),
)
CLOTHES_SRGB = (
    (0.12, 0.12, 0.14),
    (0.20, 0.27, 0.45),
    (0.75, 0.74, 0.72),
    (0.55, 0.15, 0.17),
    (0.93, 0.78, 0.18),
)
