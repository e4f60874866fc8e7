"""Render a floor plan: rays, rings at every live cell, distances to the nearest surface."""

from learnfilter.render.cache import cached_site
from learnfilter.render.live import grid_for, live_cells
from learnfilter.render.rays import Scene, build_scene, cast, cast_fan
from learnfilter.render.rings import cast_rings, render_site
from learnfilter.render.site import Site

__all__ = [
    "Scene",
    "Site",
    "build_scene",
    "cached_site",
    "cast",
    "cast_fan",
    "cast_rings",
    "grid_for",
    "live_cells",
    "render_site",
]
