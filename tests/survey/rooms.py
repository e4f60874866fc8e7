"""Toy worlds rendered for a camera of 90 degrees."""

from functools import cache

from learnfilter.core.strip import Strip, even_strip, lay_on_ring
from learnfilter.plan import read_plan
from learnfilter.render import grid_for, render_site


@cache
def plan_of(name):
    return read_plan(f"toy_worlds/{name}.geojson")


@cache
def room(name, fov_columns=32, cell_m=0.25, headings=32):
    """Columns 2.8 degrees apart, looking ahead; 128 columns look all round."""
    strip = Strip(even_strip(-2.8125 * (fov_columns - 1) / 2, 2.8125, fov_columns), max_range_m=6.0)
    layout = lay_on_ring(strip, headings, 128 // headings)
    plan = plan_of(name)
    return render_site(plan, layout, grid_for(plan, headings, cell_m), robot_radius_m=0.25, max_range_m=6.0)
