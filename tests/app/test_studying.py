"""Recorded drives as a study takes them: whole, or cut to blocks of rows."""

import numpy as np
import pytest

from learnfilter.app.build import build_plan, build_strip
from learnfilter.app.command import compose_settings
from learnfilter.app.config import typed
from learnfilter.app.paths import data_dir
from learnfilter.app.recipes import BlocksConfig
from learnfilter.app.studying import recorded_place, study_subject
from learnfilter.app.verb_settings import AblateConfig, TrainConfig
from learnfilter.core.errors import ConfigError, DriveError
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import write_drive

SQUARE = data_dir("toy_worlds") / "square_room.geojson"
ROWS = 25


def training(*words) -> TrainConfig:
    return typed(compose_settings("train", list(words)), TrainConfig)


def judging(*words) -> AblateConfig:
    return typed(compose_settings("ablate", [f"site.file={SQUARE}", *words]), AblateConfig)


@pytest.fixture(scope="module")
def table(tmp_path_factory) -> str:
    """A drive of 25 rows straight ahead in the square room; row r was measured at r seconds."""
    strip = build_strip(training().strip)
    odometry = np.zeros((ROWS, 3))
    odometry[1:, 0] = 0.05
    reference = np.stack([1 + 0.05 * np.arange(ROWS), np.full(ROWS, 2.0), np.zeros(ROWS)], axis=1)
    drive = Drive(
        np.arange(ROWS, dtype=float),
        odometry,
        np.full((ROWS, strip.columns), 2.0, np.float32),
        np.full((ROWS, strip.columns, 3), 0.5, np.float32),
        reference,
        strip,
        "round",
    )
    path = tmp_path_factory.mktemp("recorded") / "round.parquet"
    write_drive(drive, path)
    return str(path)


def rows_of(paths, blocks, every_start=True) -> list[range]:
    """Rows that each drive of the place has."""
    place = recorded_place(training(), build_plan(judging().site), paths, blocks, every_start)
    return [range(int(drive.time_s[0]), int(drive.time_s[-1]) + 1) for drive in place.drives]


def units_of(paths, blocks) -> list[str]:
    return list(recorded_place(training(), build_plan(judging().site), paths, blocks, True).units)


def test_without_blocks_a_drive_is_judged_whole(table):
    """All 25 rows, from the first."""
    assert rows_of([table], None) == [range(ROWS)]


def test_every_row_of_a_block_begins_a_drive_to_the_blocks_end(table):
    """Second block of ten rows, and every second after it: ten drives that all end before row 20."""
    assert rows_of([table], BlocksConfig(10, 1, 2)) == [range(start, 20) for start in range(10, 20)]


def test_a_block_for_training_is_one_drive(table):
    """Rows 10 to 19 once."""
    assert rows_of([table], BlocksConfig(10, 1, 2), every_start=False) == [range(10, 20)]


def test_the_last_block_ends_with_the_drive(table):
    """Blocks 0 and 2: the third has five rows only."""
    assert rows_of([table], BlocksConfig(10, 0, 2), every_start=False) == [range(10), range(20, 25)]


def test_blocks_that_interleave_share_no_row(table):
    """What was trained on is never judged on: odd blocks against even ones."""
    even, odd = (
        {row for rows in rows_of([table], BlocksConfig(4, first, 2)) for row in rows} for first in (0, 1)
    )
    assert even | odd == set(range(ROWS)) and not even & odd


def test_drives_of_a_block_begin_where_they_begin(table):
    """None carries the motion from the row before its first."""
    place = recorded_place(training(), build_plan(judging().site), [table], BlocksConfig(10, 1, 2), True)
    assert all((drive.odometry[0] == 0).all() for drive in place.drives)
    assert len({drive.name for drive in place.drives}) == 10


def test_starts_of_one_block_are_one_unit_of_evidence(table):
    """Three blocks of a drive are three units, however many drives begin in each."""
    units = units_of([table], BlocksConfig(10, 0, 1))
    assert [units.count(unit) for unit in dict.fromkeys(units)] == [10, 10, 5]


def test_a_drive_too_short_for_the_blocks_is_the_users_to_mend(table):
    """The fourth block of ten begins after the last of 25 rows."""
    with pytest.raises(DriveError) as raised:
        rows_of([table], BlocksConfig(10, 3, 1))
    assert raised.value.place == "blocks"


def test_a_drive_of_another_sensor_is_refused(table):
    """32 columns recorded, 180 trained for."""
    settings = training("strip=scanner-180")
    with pytest.raises(DriveError) as raised:
        recorded_place(settings, build_plan(judging().site), [table], None, True)
    assert "180" in str(raised.value) and "32" in str(raised.value)


def test_nobody_knows_all_of_a_recorded_drive(table):
    """The oracle needs a simulation."""
    asked = judging("study.oracle=true", f"drives=[{table}]")
    with pytest.raises(ConfigError) as raised:
        study_subject(training(), asked.site, asked.conditions, asked.study, 0, asked.drives)
    assert raised.value.place == "study.oracle"


def test_recorded_drives_are_one_place_under_a_name_of_their_own(table):
    """No condition was simulated; the title counts the drives."""
    asked = judging(f"drives=[{table}]", "blocks={rows: 10, first: 1, every: 2}")
    subject = study_subject(
        training(), asked.site, asked.conditions, asked.study, 0, asked.drives, asked.blocks
    )
    ((condition, place),) = subject.places()
    assert (condition, len(place.drives), subject.count) == ("as recorded", 10, 1)
    assert subject.title.startswith("10 recorded drives")
