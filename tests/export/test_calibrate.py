"""What is usual where the plan is true: p-values, alarms, and what it takes to say so."""

import json
from dataclasses import replace
from itertools import pairwise

import pytest
from scipy.stats import kstest

from learnfilter.core.errors import DriveError
from learnfilter.export.calibrate import LEAST_DRIVES, calibrate
from learnfilter.filtering.rollout import weighed_steps
from learnfilter.runtime import Localizer, load_bundle
from learnfilter.runtime.bundle import MANIFEST
from learnfilter.sim.conditions import Conditions
from learnfilter.sim.rehearse import rehearse_site
from tests.shipping import LAYOUT, STRIP, WEIGHING, usual_drives


@pytest.fixture(scope="module")
def bundle(shipped):
    return load_bundle(shipped("beam+colour"))


@pytest.fixture(scope="module")
def fresh():
    """Drives on the same plan that the watch was not calibrated by."""
    known = len(usual_drives())
    drives = rehearse_site(5, "offices", Conditions(), STRIP, 20, known + 40, 8.0, 8.0, without_finishes=0.0)
    return drives.drives[known:]


def answers(bundle, drive):
    localizer = Localizer(bundle)
    rows = zip(drive.odometry, drive.depth_m, drive.rgb, strict=True)
    return [answer for answer in (localizer.step(*row) for row in rows) if answer.weighed]


def test_p_values_are_uniform_on_fresh_drives(bundle, fresh):
    """One strip a drive, the sixth that is weighed, since strips of a drive depend on one another."""
    p = [answers(bundle, drive)[5].surprise for drive in fresh]
    assert kstest(p, "uniform").pvalue > 0.01


def test_fresh_drives_give_hardly_an_alarm(bundle, fresh):
    """Forty drives of ten strips, calibrated on half as many of twice the length."""
    alarms = [answer.alarm for drive in fresh for answer in answers(bundle, drive)]
    # the threshold is the largest of 20 drives: 40 others pass it some times, were it a matter of luck alone
    assert len(alarms) > 300 and sum(alarms) <= 8


def test_the_manifest_says_on_how_much_it_rests(bundle):
    """Drives, the strips of them that are weighed, and a rate that so many strips can vouch for."""
    said = bundle.manifest["watch"]
    cuts = (weighed_steps(drive, LAYOUT, WEIGHING.after_m, WEIGHING.after_rad) for drive in usual_drives())
    strips = sum(len(cut.rows) for cut in cuts)
    assert (said["drives"], said["strips"]) == (20, strips)
    assert said["rate_per_strip"] == pytest.approx(1 / (strips + 1))


@pytest.mark.parametrize("table", ["searching", "locked"])
def test_tables_rise(bundle, table):
    """As many shares as nats, strictly between zero and one."""
    nats, share = (bundle.manifest["watch"][table][name] for name in ("nats", "share"))
    assert len(nats) == len(share) and share[0] > 0 and share[-1] < 1
    assert all(b > a for column in (nats, share) for a, b in pairwise(column))


def test_hardly_a_shelf_is_gone_where_the_plan_is_true(bundle):
    """A share of sightings; clutter hides what is drawn but never removes it."""
    assert 0 <= bundle.manifest["watch"]["gone_share"] < 0.1


def test_the_same_drives_say_the_same_again(shipped, bundle):
    """The watch that a bundle has plays no part in calibrating it."""
    expected = json.loads((shipped("beam+colour") / MANIFEST).read_text())["watch"]
    assert calibrate(bundle, usual_drives()) == expected


def test_a_drive_that_went_wrong_sets_no_threshold(bundle):
    """Its surprises are no false alarms: with references far off, the alarm is as low as it gets."""
    far = [replace(drive, reference=drive.reference + 100.0) for drive in usual_drives()]
    assert calibrate(bundle, far)["alarm"] == 1.0


def test_too_few_drives_are_refused(bundle):
    """With how many are needed."""
    with pytest.raises(DriveError, match=f"at least {LEAST_DRIVES}, got 19"):
        calibrate(bundle, usual_drives()[:19])
