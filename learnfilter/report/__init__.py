"""Pictures of plans and drives, and a run's page: one HTML file that works from a disk without a network."""

from learnfilter.report.drive_model import Story, Timeline, Trail, TrailMap
from learnfilter.report.model import (
    Chart,
    Column,
    Curve,
    Episode,
    Forest,
    Interval,
    Note,
    Placement,
    RunPage,
    SiteMap,
    Table,
    Track,
)
from learnfilter.report.page import write_page
from learnfilter.report.palette import belief_image
from learnfilter.report.pictures import draw_plan, draw_replay

__all__ = [
    "Chart",
    "Column",
    "Curve",
    "Episode",
    "Forest",
    "Interval",
    "Note",
    "Placement",
    "RunPage",
    "SiteMap",
    "Story",
    "Table",
    "Timeline",
    "Track",
    "Trail",
    "TrailMap",
    "belief_image",
    "draw_plan",
    "draw_replay",
    "write_page",
]
