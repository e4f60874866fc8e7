"""Reading plans from pictures whose geometry is known in numbers, and from two real ones."""

import zlib

import numpy as np
import pytest
import shapely
from PIL import Image

from learnfilter.core.errors import PlanError
from learnfilter.core.strip import lay_on_ring
from learnfilter.drives.tables import read_drive
from learnfilter.plan import check_plan, read_plan, write_plan
from learnfilter.plan.floorplan import WALL
from learnfilter.plan.picture import MOST_PIXELS
from learnfilter.render import render_site
from learnfilter.render.live import grid_for
from learnfilter.render.rings import cast_rings
from tests.plan.test_writer import assert_same

WHITE, BLACK, GREY = 255, 0, 128
# 0.1 m a pixel: the room below is 4 m wide and 3 m high inside
OPTIONS = {"metres_per_pixel": 0.1, "wall_grey": [0, 60], "free_grey": [200, 255]}
LAB = {
    "metres_per_pixel": 0.05,
    "wall_grey": [0, 0],
    "free_grey": [254, 254],
    "left_m": -21.227,
    "bottom_m": -34.125,
}


def room() -> np.ndarray:
    """[34 42] a white floor of 30 x 40 pixels inside a black wall of one on the sides, two above and below;
    drawn from the top, as pictures are."""
    levels = np.full((34, 42), BLACK, np.uint8)
    levels[2:-2, 1:-1] = WHITE
    return levels


def save(path, levels: np.ndarray | Image.Image, **how):
    """Write a picture; returns its path."""
    image = levels if isinstance(levels, Image.Image) else Image.fromarray(levels)
    image.save(path, **how)
    return path


def ranges(plan, x: float, y: float) -> tuple[list[float], list[bool]]:
    """What the plan predicts to the right, up, to the left and down."""
    range_m, unsure, _ = cast_rings(plan, np.array([x]), np.array([y]), np.arange(4) * np.pi / 2, np.inf)
    return range_m[0].tolist(), unsure[0].tolist()


@pytest.fixture
def file(tmp_path):
    return tmp_path / "hall.png"


def test_walls_stand_where_their_pixels_end(file):
    """From (1.1, 1.2): 3 m to the right wall's face, 2 m up, 1 m left, 1 m down."""
    range_m, unsure = ranges(read_plan(save(file, room()), **OPTIONS), 1.1, 1.2)
    assert range_m == pytest.approx([3, 2, 1, 1], abs=1e-6)  # float32
    assert not any(unsure)


def test_straight_runs_of_pixels_are_one_segment(file):
    """The wall has eight corners in all, outside and inside."""
    plan = read_plan(save(file, room()), **OPTIONS)
    assert plan.kind.tolist() == [WALL] * 8
    assert plan.bounds == pytest.approx((0, 0, 4.2, 3.4))
    assert plan.name == "hall"


def test_the_lower_left_corner_is_moved_where_asked(file):
    """And the first row of the picture is the top: only the upper wall has a dent, 0.1 m deep."""
    levels = room()
    levels[1, 10] = WHITE
    plan = read_plan(save(file, levels), **OPTIONS, left_m=-20.0, bottom_m=5.5)
    assert plan.bounds == pytest.approx((-20, 5.5, -15.8, 8.9))
    # the middle of column 10, 1.3 m below the upper wall's face
    assert ranges(plan, -20 + 1.05, 7.4)[0] == pytest.approx([3.05, 1.4, 0.95, 1.7], abs=1e-6)


def test_the_inside_of_a_wall_is_solid(file):
    """Everything black is: 42 x 34 - 40 x 30 pixels of 0.01 m2."""
    plan = read_plan(save(file, room()), **OPTIONS)
    assert sum(shapely.Polygon(outline).area for outline in plan.solids) == pytest.approx(2.28)


def test_other_greys_are_unmapped(file):
    """The lower 1 m of the floor is grey: rays end there without evidence, walls stay sure."""
    levels = room()
    levels[22:32] = np.where(levels[22:32] == WHITE, GREY, levels[22:32])
    plan = read_plan(save(file, levels), **OPTIONS)
    range_m, unsure = ranges(plan, 2.1, 2.2)
    assert range_m == pytest.approx([2, 1, 2, 1], abs=1e-6)
    assert unsure == [False, False, False, True]
    assert sum(shapely.Polygon(outline).area for outline in plan.unmapped) == pytest.approx(4)


def test_specks_are_kept_and_cut_into_areas_without_holes(file):
    """20 x 15 white pixels in a grey floor: each stays a hole, whatever pieces the grey is cut into."""
    levels = room()
    levels[2:-2, 1:-1] = GREY
    levels[3:32:2, 2:41:2] = WHITE
    plan = read_plan(save(file, levels), **OPTIONS)
    pieces = shapely.polygons([shapely.linearrings(outline) for outline in plan.unmapped])
    assert shapely.is_valid(pieces).all()
    row, column = np.indices(levels.shape)
    centres = shapely.points(column / 10 + 0.05, 3.35 - row / 10)
    covered = np.zeros(levels.size, int)
    np.add.at(covered, shapely.STRtree(pieces).query(centres.ravel(), predicate="intersects")[0], 1)
    # a cut may run through the centre of a grey pixel, which then lies in two pieces
    np.testing.assert_array_equal(covered.reshape(levels.shape) > 0, levels == GREY)


def test_pixels_that_touch_at_a_corner_are_two_walls(file):
    """No ray passes between them all the same."""
    levels = np.full((20, 20), WHITE, np.uint8)
    levels[9, 9] = levels[10, 10] = BLACK
    plan = read_plan(save(file, levels), **OPTIONS)
    assert len(plan.solids) == 2
    x = np.array([0.5])
    # along the diagonal from (0.5, 0.5), through the corner they share at (1, 1)
    range_m, _, _ = cast_rings(plan, x, x, np.pi / 4 + np.array([-1e-9, 0, 1e-9]), np.inf)
    assert range_m[0] == pytest.approx(np.sqrt(0.5), abs=1e-6)


def transparent() -> Image.Image:
    """The room with walls as they are and a black floor that is fully transparent."""
    levels = room()
    return Image.fromarray(np.dstack([np.zeros((34, 42, 3), np.uint8), 255 - levels]))


def palette(transparency: bool) -> Image.Image:
    """The room in a palette whose last entries are black (wall) and white or transparent blue (floor)."""
    image = Image.fromarray(np.where(room() == WHITE, 7, 6).astype(np.uint8), "L")
    image = Image.frombytes("P", image.size, image.tobytes())
    floor = [0, 0, 255] if transparency else [255, 255, 255]
    image.putpalette([99] * 18 + [0, 0, 0] + floor)
    return image


ENCODINGS = {
    "grey and alpha": (lambda: transparent().convert("LA"), {}),
    "RGB": (lambda: Image.fromarray(room()).convert("RGB"), {}),
    "RGBA": (transparent, {}),
    "palette": (lambda: palette(False), {}),
    "palette with transparency": (lambda: palette(True), {"transparency": 7}),
    "1 bit": (lambda: Image.fromarray(room()).convert("1"), {}),
    "16 bits": (lambda: Image.fromarray(room().astype(np.uint16) * 257), {}),
    "16 bits with transparency": (
        lambda: Image.fromarray(np.where(room() == WHITE, 3000, 0).astype(np.uint16)),
        {"transparency": 3000},
    ),
}


@pytest.mark.parametrize("encoding", ENCODINGS)
def test_every_kind_of_png_shows_the_same_room(file, encoding):
    """Transparent pixels lie on white, 16 bits are scaled to 8."""
    draw, how = ENCODINGS[encoding]
    plan = read_plan(save(file, draw(), **how), **OPTIONS)
    assert_same(plan, read_plan(save(file, room()), **OPTIONS))


def test_half_transparent_black_is_middle_grey(file):
    """0.5 x 0 + 0.5 x 255: black lines at half strength are no walls of grey 0 to 60 but of 100 to 150."""
    levels = np.asarray(transparent()).copy()
    levels[..., 3] //= 2
    save(file, Image.fromarray(levels))
    plan = read_plan(file, **{**OPTIONS, "wall_grey": [100, 150]})
    assert len(plan.segments) == 8
    with pytest.raises(PlanError, match=r"nothing in the picture is wall.*128 \("):
        read_plan(file, **OPTIONS)


def test_fine_pixels_become_blocks_that_keep_thin_lines(file):
    """Lines of 1 pixel at 5 mm a pixel in blocks of 2 cm: no line is lost or moved by as much as 2 cm."""
    levels = np.full((401, 802), WHITE, np.uint8)
    levels[[0, 400]] = BLACK
    levels[:, [0, 333, 801]] = BLACK
    plan = read_plan(save(file, levels), **{**OPTIONS, "metres_per_pixel": 0.005})
    # from (3, 1.2): lines at x = 1.665 to 1.67 and 4.005 to 4.01, y = 0 to 0.005 and 2.000 to 2.005
    range_m, unsure = ranges(plan, 3.0, 1.2)
    exact = np.array([1.005, 0.8, 1.33, 1.195])
    assert (range_m <= exact + 1e-6).all()  # blocks only thicken; float32
    assert (range_m > exact - 0.02).all()
    assert not any(unsure)


def test_blocks_start_at_the_lower_left_corner(file):
    """A picture that does not divide into blocks keeps its frame: the lower line lies at y = 0."""
    levels = np.full((401, 301), WHITE, np.uint8)
    levels[400] = levels[:, 0] = BLACK
    plan = read_plan(save(file, levels), **{**OPTIONS, "metres_per_pixel": 0.005})
    assert ranges(plan, 0.5, 0.5)[0][2:] == pytest.approx([0.48, 0.48], abs=1e-6)  # one block of 2 cm each


def test_a_block_is_free_only_where_all_of_it_is(file):
    """One grey pixel in a block of 16 makes it unmapped, one black pixel makes it wall."""
    levels = np.full((400, 400), WHITE, np.uint8)
    levels[101, 101] = GREY
    levels[202:204, 202] = GREY, BLACK
    plan = read_plan(save(file, levels), **{**OPTIONS, "metres_per_pixel": 0.005})
    assert [shapely.Polygon(outline).area for outline in plan.unmapped] == pytest.approx([0.0004])
    assert [shapely.Polygon(outline).area for outline in plan.solids] == pytest.approx([0.0004])


def test_a_written_picture_comes_back_exactly(tmp_path, file):
    """Walls with holes, unmapped area with holes, numbers that are no round decimals."""
    levels = room()
    levels[10:20, 10:30] = GREY
    levels[12:15, 12:15] = WHITE
    levels[25:28, 5:9] = BLACK
    plan = read_plan(save(file, levels), **{**OPTIONS, "metres_per_pixel": 1 / 7}, left_m=1 / 3)
    write_plan(plan, tmp_path / "hall.geojson")
    assert_same(read_plan(tmp_path / "hall.geojson"), plan)


def test_a_clean_picture_has_no_findings_but_its_missing_colours(file):
    """Outlines are closed, so no end is open and no wall is drawn twice."""
    findings = check_plan(read_plan(save(file, room()), **OPTIONS))
    assert [finding.what for finding in findings] == ["no_finishes"]


MISTAKES = {
    "no scale": ({"metres_per_pixel": None}, r"expected site\.metres_per_pixel=\.\.\.$"),
    "no wall": (
        {"wall_grey": None},
        r"mostly 255 \(84\.0%\), 0 \(16\.0%\); expected site\.wall_grey=\[low,high\]$",
    ),
    "nothing": (
        dict.fromkeys(OPTIONS),
        r"expected site\.metres_per_pixel=\.\.\., site\.wall_grey=\[low,high\], site\.free_grey=",
    ),
    "one grey": ({"wall_grey": [0]}, r"site\.wall_grey: .*expected \[low, high\].*got \[0\]"),
    "backwards": ({"free_grey": [255, 200]}, r"site\.free_grey: .*expected \[low, high\].*got \[255, 200\]"),
    "above 255": ({"free_grey": [200, 256]}, r"site\.free_grey: .*within 0 .*got \[200, 256\]"),
    "below 0": ({"wall_grey": [-1, 60]}, r"site\.wall_grey: .*got \[-1, 60\]"),
    "shared": (
        {"wall_grey": [0, 200]},
        r"both wall and free.*share no grey, got \[0, 200\] and \[200, 255\]",
    ),
    "no wall pixel": (
        {"wall_grey": [1, 60]},
        r"site\.wall_grey: nothing .* is wall; .*255 \(84\.0%\).*got \[1, 60\]",
    ),
    "no free pixel": ({"free_grey": [200, 254]}, r"site\.free_grey: nothing .* is free; .*255 \(84\.0%\)"),
    "too large": (
        {"metres_per_pixel": 50.0},
        r"2100 m across; expected 1 to 2000 m for 42 pixels, got 50\.0",
    ),
    "too small": ({"metres_per_pixel": 0.02}, r"site\.metres_per_pixel: .*0\.84 m across"),
    "turned inside out": ({"metres_per_pixel": -0.1}, r"site\.metres_per_pixel"),
    "no number": ({"metres_per_pixel": float("nan")}, r"site\.metres_per_pixel"),
    "nowhere": ({"left_m": float("inf")}, r"site\.left_m, site\.bottom_m: .*got inf, 0\.0"),
    "a map's option": ({"level": 1}, r"unknown option; expected metres_per_pixel, .*got level"),
}


@pytest.mark.parametrize("mistake", MISTAKES)
def test_a_wrong_option_is_named_with_what_would_be_right(file, mistake):
    """1200 of 1428 pixels are white: what the message says of the greys is enough to choose ranges."""
    options, message = MISTAKES[mistake]
    with pytest.raises(PlanError, match=rf"hall\.png.*{message}"):
        read_plan(save(file, room()), **{**OPTIONS, **options})


def test_a_map_refuses_the_options_of_a_picture(tmp_path):
    """GeoJSON has metres of its own."""
    (tmp_path / "plan.geojson").write_text("{}")
    with pytest.raises(PlanError, match=r"unknown option.*got metres_per_pixel"):
        read_plan(tmp_path / "plan.geojson", metres_per_pixel=0.05)


def test_a_file_that_is_no_picture_is_refused(file):
    """Text, nothing, and another kind of picture by that name."""
    for content in (b"no picture", b""):
        file.write_bytes(content)
        with pytest.raises(PlanError, match=r"hall\.png: the picture cannot be read; expected a whole PNG"):
            read_plan(file, **OPTIONS)
    with pytest.raises(PlanError, match="expected a whole PNG"):
        read_plan(save(file, room(), format="gif"), **OPTIONS)


def test_a_truncated_picture_is_refused(file):
    """Wherever it was cut off: a plan with half its walls must not be taken for one."""
    whole = save(file, room()).read_bytes()
    # after the pixels (4 and 4 bytes of checks, then 12 that say it ends) nothing of the plan is missing
    for length in range(len(whole) - 20):
        file.write_bytes(whole[:length])
        with pytest.raises(PlanError, match="expected a whole PNG"):
            read_plan(file, **OPTIONS)


def test_an_absent_picture_is_refused(file):
    """With what the system says."""
    with pytest.raises(PlanError, match=r"hall\.png: the plan cannot be opened \(No such file"):
        read_plan(file, **OPTIONS)


def test_a_picture_larger_than_its_library_likes_is_read(file):
    """90 million pixels of 1 cm, which the library's general opener warns of: a frame of 95 x 95 m."""
    frame = Image.new("1", (9500, 9500))
    frame.paste(1, (4, 4, 9496, 9496))
    plan = read_plan(save(file, frame), **{**OPTIONS, "metres_per_pixel": 0.01})
    assert ranges(plan, 1.04, 94.0)[0] == pytest.approx([93.92, 0.96, 1, 93.96], abs=1e-5)  # float32 at 94 m


def test_a_picture_beyond_any_plan_is_refused_before_it_is_decoded(file):
    """A file of a few hundred bytes may claim any size in its header."""
    content = bytearray(save(file, Image.new("1", (8, 8))).read_bytes())
    side = int(MOST_PIXELS**0.5) + 1
    content[16:24] = side.to_bytes(4) * 2
    content[29:33] = zlib.crc32(content[12:29]).to_bytes(4)
    file.write_bytes(content)
    with pytest.raises(
        PlanError, match=r"too large; expected at most 400,000,000 pixels, got 20,001 x 20,001"
    ):
        read_plan(file, **OPTIONS)


@pytest.fixture(scope="module")
def lab(shared_data):
    """A real scanned floor. Source: see NOTE.md there (Radish, Intel Research Lab, Seattle)."""
    return read_plan(shared_data / "logs" / "lab-a-occupancy.png", **LAB)


@pytest.fixture(scope="module")
def lab_drive(shared_data):
    """The real drive on that floor; even tens of its strips drew the picture, odd ones are for tests."""
    return read_drive(shared_data / "logs" / "lab-a.parquet")


def test_a_real_drive_stays_on_live_cells(lab, lab_drive):
    """At least 99 % of the reference poses, with half of a small robot's width."""
    grid = grid_for(lab, 64, 0.25)
    site = render_site(lab, lay_on_ring(lab_drive.strip, 64, 4), grid, robot_radius_m=0.2, max_range_m=12)
    _, _, own = site.nearest_live(lab_drive.reference)
    assert own.mean() >= 0.99


def test_real_strips_agree_with_what_the_picture_predicts(lab, lab_drive):
    """Strips that did not draw the picture, at their reference poses: half a pixel of bias and noise."""
    test = np.arange(len(lab_drive)) // 10 % 2 == 1
    x, y, heading = lab_drive.reference[test].T
    angles = np.arange(720) * (np.pi / 360)
    range_m, unsure, _ = cast_rings(lab, x, y, angles, np.inf)
    # half a degree apart: the nearest is off by 2 cm at 5 m
    along = np.rint((heading[:, None] + lab_drive.strip.bearings_rad) * (360 / np.pi)).astype(int) % 720
    errors = lab_drive.depth_m[test] - np.take_along_axis(range_m, along, axis=1)
    errors = errors[np.isfinite(errors) & ~np.take_along_axis(unsure, along, axis=1)]
    assert len(errors) > 50_000
    assert np.median(np.abs(errors)) < 0.1


def test_a_real_scan_comes_back_exactly(tmp_path, lab):
    """1,400 walls and 6,800 pieces of unmapped area."""
    write_plan(lab, tmp_path / "lab.geojson")
    assert read_plan(tmp_path / "lab.geojson").content_hash() == lab.content_hash()


def test_thin_lines_of_a_large_real_drawing_survive(shared_data):
    """Source: MLSTRUCT-FP (MIT). 64 million pixels of 5.3 mm, lines of 2 pixels: every dark pixel of the
    drawing must lie in a wall."""
    path = shared_data / "plans" / "mlstruct-floor302.png"
    scale = 1 / 188.445
    plan = read_plan(path, metres_per_pixel=scale, wall_grey=[0, 120], free_grey=[121, 255])
    with Image.open(path) as image:
        paper = Image.new("RGBA", image.size, "white")
        paper.alpha_composite(image)
    row, column = np.nonzero(np.asarray(paper.convert("L")) <= 120)
    chosen = np.random.default_rng(0).choice(len(row), 3000, replace=False)
    x, y = (column[chosen] + 0.5) * scale, (paper.height - row[chosen] - 0.5) * scale
    walls = shapely.STRtree(shapely.polygons([shapely.linearrings(outline) for outline in plan.solids]))
    inside = walls.query(shapely.points(x, y), predicate="intersects")[0]
    assert len(np.unique(inside)) == len(chosen)
