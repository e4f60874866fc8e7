"""Floor plans: read one, check it, write it.  These names are public; the rest may change."""

from learnfilter.plan.checks import check_plan
from learnfilter.plan.finding import Finding
from learnfilter.plan.floorplan import Finish, FloorPlan
from learnfilter.plan.readers import read_plan
from learnfilter.plan.writer import write_plan

__all__ = ["Finding", "Finish", "FloorPlan", "check_plan", "read_plan", "write_plan"]
