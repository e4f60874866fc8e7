"""Drive tables: what goes in comes out, and what is wrong is named."""

import csv
import json
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from learnfilter.core.errors import DriveError
from learnfilter.core.strip import Strip, even_strip
from learnfilter.drives.drive import Drive
from learnfilter.drives.tables import iter_rows, read_drive, write_drive

SUFFIXES = (".parquet", ".csv")
STRIP = Strip(
    even_strip(30.0, -30.0, 3), 0.2, 6.0, has_colour=True, blind=(1,), mount=(0.1, -0.05, np.radians(12.5))
)
NAN = float("nan")


def make_drive(rows=5, strip=STRIP, reference=True):
    """A drive with readings in range, one NaN among them."""
    rng = np.random.default_rng(3)
    odometry = rng.normal(size=(rows, 3))
    odometry[0] = 0
    depth = rng.uniform(0.3, 5.9, (rows, strip.columns)).astype(np.float32)
    depth[rows // 2, 0] = np.nan
    return Drive(
        time_s=np.cumsum(rng.uniform(0.1, 1.0, rows)),
        odometry=odometry,
        depth_m=depth,
        rgb=rng.random((rows, strip.columns, 3), dtype=np.float32) if strip.has_colour else None,
        reference=rng.normal(size=(rows, 3)) if reference else None,
        strip=strip,
        name="night shift",
        site="north hall",
    )


def assert_same(expected, actual):
    """Arrays bit for bit, words equal, angles to the precision files keep."""
    for name in ("time_s", "odometry", "depth_m", "rgb", "reference"):
        a, b = getattr(expected, name), getattr(actual, name)
        assert (a is None) == (b is None), name
        if a is not None:
            assert a.dtype == b.dtype, name
            np.testing.assert_array_equal(b, a, err_msg=name)
    assert (expected.name, expected.site) == (actual.name, actual.site)
    # 1e-12 rad: files hold degrees, so a last bit may change
    np.testing.assert_allclose(actual.strip.bearings_rad, expected.strip.bearings_rad, rtol=0, atol=1e-12)
    np.testing.assert_allclose(actual.strip.mount, expected.strip.mount, rtol=0, atol=1e-12)
    plain = {"bearings_rad": (), "mount": (0.0, 0.0, 0.0)}
    assert replace(actual.strip, **plain) == replace(expected.strip, **plain)


def raw_columns(rows=3):
    """Columns of a sound table, to be spoilt: 2 depths and their colours."""
    zeros = [0.0] * rows
    return {
        "time_s": [float(i) for i in range(rows)],
        "forward_m": [0.0] + [0.5] * (rows - 1),
        "left_m": list(zeros),
        "turn_rad": list(zeros),
        "x_m": list(zeros),
        "y_m": list(zeros),
        "heading_rad": list(zeros),
        "depth_m": [[1.0, 2.0] for _ in range(rows)],
        "rgb": [[0.1, 0.2, 0.3, 0.4, 0.5, 0.6] for _ in range(rows)],
    }


SOUND = {"schema": 1, "first_bearing_deg": 0.0, "bearing_step_deg": 10.0, "max_range_m": 5.0}


def write_raw(path, columns, members=SOUND):
    """Write a table without the package's writer, sound or not."""
    if path.suffix == ".parquet":
        table = pa.table(columns).replace_schema_metadata({"learnfilter": json.dumps(members)})
        pq.write_table(table, path)
        return path
    names, cells = [], []
    for name, values in columns.items():
        if name == "depth_m":
            names += [f"depth_m_{i:03d}" for i in range(len(values[0]))]
        elif name == "rgb":
            names += [f"{c}_{i:03d}" for i in range(len(values[0]) // 3) for c in ("red", "green", "blue")]
        else:
            names.append(name)
    for row in range(len(columns["time_s"]) if "time_s" in columns else 0):
        listed = [values[row] for values in columns.values()]
        cells.append([v for value in listed for v in (value if isinstance(value, list) else [value])])
    with path.open("w", newline="") as file:
        file.write("# learnfilter " + json.dumps(members) + "\n")
        csv.writer(file).writerows([names, *cells])
    return path


# --- round trips --------------------------------------------------------------------------------


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("colour", [True, False])
@pytest.mark.parametrize("reference", [True, False])
def test_a_written_drive_reads_back_the_same(tmp_path, suffix, colour, reference):
    """With and without colour and reference poses."""
    drive = make_drive(strip=replace(STRIP, has_colour=colour), reference=reference)
    write_drive(drive, tmp_path / f"a{suffix}")
    assert_same(drive, read_drive(tmp_path / f"a{suffix}"))


@pytest.mark.parametrize("suffix", SUFFIXES)
@settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(data=st.data())
def test_any_numbers_survive_the_file(tmp_path, suffix, data):
    """Whatever floats a drive may hold, uneven bearings included."""
    rows, width = data.draw(st.integers(1, 4)), data.draw(st.integers(1, 4))
    finite = st.floats(-1e9, 1e9)
    bearings = data.draw(st.lists(st.floats(-3, 3), min_size=width, max_size=width, unique=True))
    odometry = data.draw(arrays(float, (rows, 3), elements=finite))
    odometry[0] = 0
    depth = st.one_of(st.just(NAN), st.floats(0.125, 64, width=32))
    drive = Drive(
        time_s=np.array(sorted(data.draw(st.lists(finite, min_size=rows, max_size=rows, unique=True)))),
        odometry=odometry,
        depth_m=data.draw(arrays(np.float32, (rows, width), elements=depth)),
        rgb=data.draw(arrays(np.float32, (rows, width, 3), elements=st.floats(0, 1, width=32))),
        reference=data.draw(arrays(float, (rows, 3), elements=finite)),
        strip=Strip(tuple(bearings), 0.125, 64.0),
        name=data.draw(st.text(st.characters(codec="utf-8"), max_size=5)),
    )
    write_drive(drive, tmp_path / f"a{suffix}")
    assert_same(drive, read_drive(tmp_path / f"a{suffix}"))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_runs_of_rows_join_to_the_whole(tmp_path, suffix):
    """Three runs of at most two rows hold what one read holds, in order."""
    drive = make_drive(rows=5)
    write_drive(drive, tmp_path / f"a{suffix}")
    runs = list(iter_rows(tmp_path / f"a{suffix}", batch_rows=2))
    assert [len(run) for run in runs] == [2, 2, 1]
    np.testing.assert_array_equal(np.concatenate([run.depth_m for run in runs]), drive.depth_m)


def test_csv_columns_have_the_published_names(tmp_path):
    """Header as design.md section 3 says, and plain enough for a spreadsheet."""
    drive = make_drive(rows=1, strip=Strip((0.0,)), reference=False)
    write_drive(drive, tmp_path / "a.csv")
    header = (tmp_path / "a.csv").read_text().splitlines()[1].split(",")
    expected = [
        "time_s",
        "forward_m",
        "left_m",
        "turn_rad",
        "depth_m_000",
        "red_000",
        "green_000",
        "blue_000",
    ]
    assert expected == header


def test_parquet_colour_is_a_list_column_by_column(tmp_path):
    """`rgb` holds red, green, blue of column 0, then of column 1."""
    drive = make_drive(rows=1)
    write_drive(drive, tmp_path / "a.parquet")
    (row,) = pq.read_table(tmp_path / "a.parquet").column("rgb").to_pylist()
    np.testing.assert_array_equal(np.float32(row), drive.rgb[0].ravel())


@pytest.mark.parametrize(("first", "step"), [(30.0, -30.0), (-43.5, 87 / 31)])
def test_even_bearings_are_written_as_first_and_step(tmp_path, first, step):
    """The members people edit by hand; 30 degrees stays 30, not 29.999999999999996."""
    write_drive(make_drive(strip=Strip(even_strip(first, step, 32))), tmp_path / "a.csv")
    members = json.loads((tmp_path / "a.csv").read_text().splitlines()[0].removeprefix("# learnfilter "))
    assert members["first_bearing_deg"] == first
    # 1e-12: a step that is no short number keeps all but its last digits
    assert members["bearing_step_deg"] == pytest.approx(step, abs=1e-12)


def test_a_failed_write_leaves_the_old_file(tmp_path):
    """What the reader would refuse is refused before the file is touched."""
    path = tmp_path / "a.csv"
    write_drive(make_drive(), path)
    before = path.read_bytes()
    bad = make_drive()
    bad.odometry[2, 0] = np.nan
    with pytest.raises(DriveError, match=r"row 2, column forward_m"):
        write_drive(bad, path)
    assert before == path.read_bytes()
    assert [path] == list(tmp_path.iterdir())


# --- the strip ----------------------------------------------------------------------------------


def test_the_real_log_reads(shared_data):
    """Radish, Intel Research Lab log as shared/data/NOTE.md describes it: plain metadata keys, no colour."""
    drive = read_drive(shared_data / "logs" / "lab-a.parquet")
    assert drive.depth_m.shape == (910, 180)
    assert drive.rgb is None and not drive.strip.has_colour
    # the note gives the share as 2.5 %, to one decimal
    assert np.isnan(drive.depth_m).mean() == pytest.approx(0.025, abs=5e-4)
    np.testing.assert_allclose(np.degrees(drive.strip.bearings_rad[::179]), [-90, 89])


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_the_given_strip_wins(tmp_path, suffix):
    """Bearings and ranges come from the caller where both speak."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns())
    strip = Strip((0.5, 0.2), max_range_m=1.5)
    drive = read_drive(path, strip)
    assert strip == drive.strip
    np.testing.assert_array_equal(drive.depth_m[0], np.float32([1.0, NAN]))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_readings_out_of_range_are_no_returns(tmp_path, suffix):
    """Ends of the range count as inside; infinity is no return."""
    columns = raw_columns(rows=2) | {"depth_m": [[0.1, 5.0], [0.05, float("inf")]]}
    drive = read_drive(write_raw(tmp_path / f"a{suffix}", columns))
    np.testing.assert_array_equal(drive.depth_m, np.float32([[0.1, 5.0], [NAN, NAN]]))


def test_depths_in_millimetres_are_found_out(tmp_path):
    """No reading of a whole drive lies within the sensor's ranges, although some came back."""
    path = tmp_path / "mm.csv"
    path.write_text("time_s,forward_m,left_m,turn_rad,depth_m_000\n0,0,0,0,1500\n1,0.1,0,0,\n")
    with pytest.raises(DriveError, match=r"mm\.csv, column depth_m: no reading.*expected metres"):
        read_drive(path, Strip((0.0,), max_range_m=6.0))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_without_a_maximum_range_nothing_is_lost(tmp_path, suffix):
    """The largest reading of the whole table serves, also when it lies in a later run."""
    columns = raw_columns() | {"depth_m": [[1.0, 2.0], [1.0, 2.0], [1.0, 30.0]]}
    members = {key: value for key, value in SOUND.items() if key != "max_range_m"}
    path = write_raw(tmp_path / f"a{suffix}", columns, members)
    assert [run.strip.max_range_m for run in iter_rows(path, batch_rows=1)] == [30.0] * 3


@pytest.mark.parametrize("said_in_file", [True, False])
def test_depth_along_the_axis_becomes_range(tmp_path, said_in_file):
    """A flat wall 2 m ahead is 2 / cos(bearing) away along each bearing."""
    columns = raw_columns() | {"depth_m": [[2.0, 2.0]] * 3}
    members = SOUND | {"first_bearing_deg": 0.0, "bearing_step_deg": 60.0}
    members |= {"depth_kind": "axis"} if said_in_file else {}
    path = write_raw(tmp_path / "a.csv", columns, members)
    drive = read_drive(path, depth_kind=None if said_in_file else "axis")
    np.testing.assert_allclose(drive.depth_m[0], [2.0, 4.0], rtol=1e-6)  # float32


def test_bearings_may_be_a_list(tmp_path):
    """Uneven columns are said one by one."""
    path = write_raw(tmp_path / "a.parquet", raw_columns(), {"bearings_deg": [90, -45]})
    np.testing.assert_allclose(read_drive(path).strip.bearings_rad, [np.pi / 2, -np.pi / 4])


def test_clockwise_columns_keep_their_order(tmp_path):
    """Reordering is the ring's affair; the drive is as the sensor gave it."""
    path = write_raw(tmp_path / "a.parquet", raw_columns(), SOUND | {"bearing_step_deg": -10.0})
    drive = read_drive(path)
    np.testing.assert_allclose(np.degrees(drive.strip.bearings_rad), [0, -10])
    np.testing.assert_array_equal(drive.depth_m[0], [1, 2])


def test_a_depth_only_strip_leaves_the_colour_in_the_file(tmp_path):
    """The caller asked for a sensor without colour."""
    path = write_raw(tmp_path / "a.parquet", raw_columns())
    assert read_drive(path, Strip((0.0, 0.1), has_colour=False)).rgb is None


def test_nulls_and_empty_cells_are_no_returns(tmp_path):
    """Each format's way to say that nothing came back."""
    columns = raw_columns()
    columns["depth_m"][1] = [None, 2.0]
    for suffix in SUFFIXES:
        drive = read_drive(write_raw(tmp_path / f"a{suffix}", columns))
        np.testing.assert_array_equal(drive.depth_m[1], [NAN, 2.0])


# --- what is refused ----------------------------------------------------------------------------


def spoil(name, row, value):
    columns = raw_columns()
    columns[name][row] = value
    return columns


BAD_ROWS = {
    "time stands still": ("time_s", 2, 1.0, r"row 2, column time_s: .*increase; expected .*, got 1\.0"),
    "time unknown": ("time_s", 1, NAN, r"row 1, column time_s: .*expected seconds, got nan"),
    "odometry unknown": ("turn_rad", 1, NAN, r"row 1, column turn_rad: .*expected a finite number, got nan"),
    "odometry infinite": ("left_m", 2, float("inf"), r"row 2, column left_m: .*got inf"),
    "moved before the start": ("forward_m", 0, 0.1, r"row 0, column forward_m: .*expected 0 .*got 0\.1"),
    "negative depth": ("depth_m", 1, [1.0, -2.0], r"row 1, column depth_m\[1\]: .*>= 0.*got -2\.0"),
    "colour of bytes": ("rgb", 1, [0, 0, 0, 255.0, 0, 0], r"row 1, column rgb\[3\]: .*got 255\.0"),
    "negative colour": ("rgb", 2, [0, -0.5, 0, 0, 0, 0], r"row 2, column rgb\[1\]: .*got -0\.5"),
    "heading unknown": ("heading_rad", 1, NAN, r"row 1, column heading_rad: .*finite, or NaN, got nan"),
    "infinite place": ("x_m", 1, float("inf"), r"row 1, column x_m: .*got inf"),
}


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("batch_rows", [1, 1024])
@pytest.mark.parametrize("case", BAD_ROWS)
def test_a_bad_row_is_named(tmp_path, suffix, batch_rows, case):
    """File, row, column, expected and got, wherever the border between runs falls."""
    name, row, value, message = BAD_ROWS[case]
    path = write_raw(tmp_path / f"a{suffix}", spoil(name, row, value))
    with pytest.raises(DriveError, match=rf"a\{suffix}, {message}"):
        list(iter_rows(path, batch_rows=batch_rows))


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("gone", ["time_s", "left_m", "depth_m", "y_m"])
def test_missing_columns_are_named(tmp_path, suffix, gone):
    """Required ones, and a reference pose without one of its three."""
    columns = {name: values for name, values in raw_columns().items() if name != gone}
    if suffix == ".csv" and gone == "depth_m":
        columns.pop("rgb")
    with pytest.raises(DriveError, match=rf"header: missing columns; expected .*, got .*without {gone}"):
        read_drive(write_raw(tmp_path / f"a{suffix}", columns))


BAD_MEMBERS = {
    "newer schema": ({"schema": 2}, r"schema: .*expected at most 1, got 2"),
    "schema of another kind": ({"schema": "1.0"}, r"expected at most 1, got 1\.0"),
    "unknown member": ({"max_range": 3}, r"unknown member; expected .*max_range_m.*, got max_range"),
    "unknown depth kind": ({"depth_kind": "disparity"}, r"expected range or axis, got disparity"),
    "range upside down": ({"min_range_m": 9}, r"empty range; expected 0 <= min < max, got \(9\.0, 5\.0\)"),
    "blind column outside": ({"blind": [2]}, r"blind: .*from 0 to 1, got \[2\]"),
    "bearings twice": ({"bearings_deg": [0, 1]}, r"said twice; .*got bearing_step_deg, bearings_deg, first"),
    "no number": ({"bearing_step_deg": "fine"}, r"bearing_step_deg: not a number; .*got fine"),
}


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("case", BAD_MEMBERS)
def test_a_bad_description_is_named(tmp_path, suffix, case):
    """Member, expected and got."""
    change, message = BAD_MEMBERS[case]
    with pytest.raises(DriveError, match=rf"a\{suffix}, metadata.*{message}"):
        read_drive(write_raw(tmp_path / f"a{suffix}", raw_columns(), SOUND | change))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_newer_schema_is_refused_although_the_strip_is_given(tmp_path, suffix):
    """Rows of a newer format may mean something else."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns(), SOUND | {"schema": 2})
    with pytest.raises(DriveError, match="schema"):
        read_drive(path, Strip((0.0, 0.1)))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_description_that_is_no_object_is_refused(tmp_path, suffix):
    """Valid JSON, but not ours."""
    with pytest.raises(DriveError, match=r"metadata: .*expected a JSON object, got \[7\]"):
        read_drive(write_raw(tmp_path / f"a{suffix}", raw_columns(), [7]))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_an_undescribed_strip_is_refused(tmp_path, suffix):
    """Neither file nor caller says where the columns look."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns(), {})
    with pytest.raises(DriveError, match=r"expected first_bearing_deg .*, got none of them"):
        read_drive(path)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_list_of_bearings_must_fit(tmp_path, suffix):
    """Three bearings for two columns."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns(), {"bearings_deg": [0, 1, 2]})
    with pytest.raises(DriveError, match=r"bearings_deg: .*a list of 2 numbers.*, got 3 of them"):
        read_drive(path)


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_a_strip_of_another_width_is_refused(tmp_path, suffix):
    """The caller's strip wins, but not over the number of columns."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns())
    with pytest.raises(DriveError, match=r"column depth_m: .*expected 3 columns.*, got 2"):
        read_drive(path, Strip((0.0, 0.1, 0.2)))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_axis_depth_sideways_is_refused(tmp_path, suffix):
    """At 90 degrees no range has that depth along the axis."""
    path = write_raw(tmp_path / f"a{suffix}", raw_columns(), SOUND | {"bearing_step_deg": 90.0})
    with pytest.raises(DriveError, match=r"depth_m\[1\]: .*within 90 degrees.*, got 90 degrees"):
        read_drive(path, depth_kind="axis")


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_an_unknown_depth_kind_is_refused(tmp_path, suffix):
    """From the caller this time."""
    with pytest.raises(DriveError, match="expected range or axis, got z"):
        read_drive(write_raw(tmp_path / f"a{suffix}", raw_columns()), depth_kind="z")


def test_an_empty_table_is_refused(tmp_path):
    """Columns but no row."""
    table = pa.table({n: pa.array([], pa.float64()) for n in ("time_s", "forward_m", "left_m", "turn_rad")})
    table = table.append_column("depth_m", pa.array([], pa.list_(pa.float32())))
    pq.write_table(table, tmp_path / "a.parquet")
    (tmp_path / "a.csv").write_text("time_s,forward_m,left_m,turn_rad,depth_m_000\n")
    for suffix in SUFFIXES:
        with pytest.raises(DriveError, match="empty; expected at least one row"):
            read_drive(tmp_path / f"a{suffix}")


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_an_empty_drive_is_not_written(tmp_path, suffix):
    """Nobody could read it."""
    empty = Drive(np.zeros(0), np.zeros((0, 3)), np.zeros((0, 3), np.float32), None, None, STRIP)
    with pytest.raises(DriveError, match="empty"):
        write_drive(empty, tmp_path / f"a{suffix}")


@pytest.mark.parametrize("batch_rows", [1, 1024])
@pytest.mark.parametrize(("name", "length"), [("depth_m", 2), ("rgb", 6)])
def test_uneven_lists_are_refused(tmp_path, name, length, batch_rows):
    """Only Parquet has lists; every row must have as many values as the first."""
    path = write_raw(tmp_path / "a.parquet", spoil(name, 2, [0.5]))
    message = rf"row 2, column {name}: .*expected {length} values in every row, got 1"
    with pytest.raises(DriveError, match=message):
        list(iter_rows(path, batch_rows=batch_rows))


def test_colour_of_another_width_is_refused(tmp_path):
    """Even lists, but not three values a depth."""
    path = write_raw(tmp_path / "a.parquet", raw_columns() | {"rgb": [[0.5] * 4] * 3})
    with pytest.raises(DriveError, match=r"column rgb: .*3 x 2 = 6 values a row, got 4"):
        read_drive(path)


def test_a_parquet_column_of_text_is_refused(tmp_path):
    """Its name, the type wanted and the type found."""
    path = write_raw(tmp_path / "a.parquet", raw_columns() | {"turn_rad": ["left", "right", "left"]})
    with pytest.raises(DriveError, match=r"column turn_rad: .*expected double, got string"):
        read_drive(path)


CSV_FAULTS = {
    "text in a cell": ("0.5,0.0", "half,0.0", r"row 1, column forward_m: not a number; .*got 'half'"),
    "short row": ("1.0,0.5,", "1.0,", r"row 1: row of another length; expected 15 cells, got 14"),
    "a depth column lost": ("depth_m_000", "depth_m_007", r"header: missing .*without depth_m_000"),
    "a colour column lost": ("green_001", "grey_001", r"header: missing .*without green_001"),
    "broken description": ('{"schema"', '{"schema', r"metadata: unreadable JSON"),
}


@pytest.mark.parametrize("batch_rows", [1, 1024])
@pytest.mark.parametrize("case", CSV_FAULTS)
def test_a_damaged_csv_is_named(tmp_path, case, batch_rows):
    """Cell, row, header and first line."""
    old, new, message = CSV_FAULTS[case]
    path = write_raw(tmp_path / "a.csv", raw_columns())
    text = path.read_text()
    assert old in text
    path.write_text(text.replace(old, new, 1))
    with pytest.raises(DriveError, match=message):
        list(iter_rows(path, batch_rows=batch_rows))


@pytest.mark.parametrize("suffix", SUFFIXES)
def test_noise_instead_of_a_table_is_refused(tmp_path, suffix):
    """Bytes of something else, and no file at all."""
    (tmp_path / f"a{suffix}").write_bytes(bytes(range(128, 256)) * 40)
    for name in ("a", "absent"):
        with pytest.raises(DriveError, match=f"{name}{suffix}"):
            read_drive(tmp_path / f"{name}{suffix}")


def test_a_parquet_damaged_inside_is_refused(tmp_path):
    """Header and footer stand, a page between them does not."""
    path = tmp_path / "a.parquet"
    write_drive(make_drive(rows=200), path)
    data = bytearray(path.read_bytes())
    data[10:400] = bytes(390)
    path.write_bytes(data)
    with pytest.raises(DriveError, match="damaged Parquet file"):
        read_drive(path)


def test_an_unknown_suffix_is_refused(tmp_path):
    """Reading and writing alike."""
    for act in (lambda path: read_drive(path), lambda path: write_drive(make_drive(), path)):
        with pytest.raises(DriveError, match=r"expected \.parquet or \.csv, got '\.xlsx'"):
            act(tmp_path / "a.xlsx")
