"""Fixtures of the report's tests."""

import pytest

from learnfilter.plan.floorplan import FloorPlan
from learnfilter.report import Episode, RunPage
from tests.report.samples import sample_episode, sample_page, sample_plan


@pytest.fixture
def plan() -> FloorPlan:
    """A small room with everything a plan may hold."""
    return sample_plan()


@pytest.fixture
def episode(plan) -> Episode:
    """Two models on one drive in that room."""
    return sample_episode(plan)


@pytest.fixture
def page(plan, episode) -> RunPage:
    """A page with every section in use."""
    return sample_page(plan, episode)
