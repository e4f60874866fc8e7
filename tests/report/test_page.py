"""The page as a file: whole, self-contained, escaped, and true to the numbers it was given."""

import base64
import io
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest
from PIL import Image

from learnfilter.core.errors import ShapeError
from learnfilter.report import RunPage, Track, write_page
from learnfilter.report.page import render_page
from tests.report.samples import COLUMNS, HOSTILE, ROWS, STEPS

VOID = {"meta", "input"}


class Reader(HTMLParser):
    """Elements in order, what is still open, and all text outside scripts and styles."""

    def __init__(self, text: str):
        super().__init__(convert_charrefs=True)
        self.elements, self.open, self.text, self.data = [], [], [], []
        self.feed(text)
        self.close()

    def handle_starttag(self, name, attributes):
        self.elements.append((name, dict(attributes)))
        if name not in VOID:
            self.open.append(name)

    def handle_endtag(self, name):
        assert self.open.pop() == name, f"</{name}> closes another element"

    def handle_data(self, data):
        if self.open and self.open[-1] == "script":
            self.data.append(data)
        elif not self.open or self.open[-1] != "style":
            self.text.append(data)


@pytest.fixture
def read(page) -> Reader:
    return Reader(render_page(page))


def test_elements_nest_and_close(read):
    """The parser never meets an end tag that closes another element, and nothing is left open."""
    assert read.open == []


def test_hostile_text_stays_text(read):
    """Two drives' data and the page's own script are the only scripts; the text is read back as given."""
    scripts = [attributes for name, attributes in read.elements if name == "script"]
    assert [s.get("type") for s in scripts] == ["application/json", "application/json", None]
    assert not any(key.startswith("on") for _, attributes in read.elements for key in attributes)
    assert sum(HOSTILE in text for text in read.text) >= 20


def test_nothing_is_fetched_from_elsewhere(read, page):
    """Every address on the page points into it, and a policy forbids the rest."""
    addresses = [
        a[key] for _, a in read.elements for key in ("src", "href", "xlink:href", "action") if key in a
    ]
    assert addresses and all(address.startswith(("#", "data:image/png;base64,")) for address in addresses)
    assert not re.search(r"url\((?!#)|@import", render_page(page))
    policy = next(a["content"] for n, a in read.elements if n == "meta" and a.get("http-equiv"))
    assert policy.startswith("default-src 'none'")


def test_inner_links_have_a_target(read):
    """No dead link in the contents, no plan used that is not drawn."""
    names = {a["id"] for _, a in read.elements if "id" in a}
    wanted = {a["href"][1:] for _, a in read.elements if a.get("href", "").startswith("#")}
    assert wanted <= names


def test_identifiers_are_unique(read):
    """Two drives on one site share its drawing and nothing else."""
    names = [a["id"] for _, a in read.elements if "id" in a]
    assert len(names) == len(set(names))


def test_pictures_have_words(read):
    """Every drawing is either described or marked as an ornament."""
    drawings = [a for n, a in read.elements if n == "svg" and a.get("class") not in ("frames", "symbols")]
    assert all(a.get("aria-label") or a.get("aria-hidden") for a in drawings)


def test_embedded_numbers_are_the_given_numbers(read, episode):
    """Poses, errors and entropies of the data are those of the episode: 3-4-5 triangle, 10 degrees."""
    data = json.loads(read.data[0])
    track = data["tracks"][0]
    np.testing.assert_allclose(track["estimate"], episode.tracks[0].estimate, atol=5e-4)  # written to 1 mm
    np.testing.assert_allclose(track["entropy"], episode.tracks[0].entropy_nats, atol=5e-4)
    assert track["error_m"] == [0.5] * STEPS and track["error_deg"] == [10.0] * STEPS
    assert data["depth"][0] == [2.0, None, 2.0]


@pytest.mark.parametrize("number", ["91.7% [88.0%, 95.0%]", "1.61", "3.62", "12704", "+0.10 [+0.02, +0.18]"])
def test_shown_numbers_are_the_given_numbers(read, number):
    """Tables and plots write what they were given."""
    assert any(number in text for text in read.text)


def test_frames_have_north_on_top(read):
    """At strip 1 all mass is in row 0, column 0: the lower left pixel is opaque, all others clear."""
    image = next(a for n, a in read.elements if n == "image" and a["class"] == "belief by-day")
    data = base64.b64decode(image["href"].partition(",")[2])
    with Image.open(io.BytesIO(data)) as sheet:
        alpha = np.asarray(sheet.convert("RGBA"))[:ROWS, :COLUMNS, 3]
    expected = np.zeros((ROWS, COLUMNS))
    expected[-1, 0] = 255
    np.testing.assert_array_equal(alpha, expected)


def test_a_long_drive_keeps_its_first_and_last_strip(page, episode):
    """500 strips on a large lattice stay under 2 MB, and the numbering says which strips are shown."""
    mass = np.zeros((500, 120, 140), np.float32)
    mass[:, 20:80, 30:90] = np.random.default_rng(1).random((60, 60)) / 1800  # a wide, noisy belief
    track = Track("matcher", mass, np.zeros((500, 3)), np.ones(500))
    long = replace(episode, tracks=(track,), depth_m=np.ones((500, 3)), reference=None)
    text = render_page(replace(page, episodes=(long,)))
    strips = json.loads(Reader(text).data[0])["strips"]
    assert (strips[0], strips[-1]) == (1, 500)
    assert len(text) < 2_000_000


def test_a_page_of_words_alone_is_a_page(tmp_path):
    """Every part but the verdict may be absent; cautions are there all the same."""
    write_page(RunPage("t", "plan", "h", "c", "j"), tmp_path / "report.html")
    read = Reader((tmp_path / "report.html").read_text(encoding="utf-8"))
    assert [a["id"] for n, a in read.elements if n == "section"] == ["cautions"]


def test_the_same_page_is_written_byte_for_byte(page):
    """No clock and no address of an object gets in."""
    assert render_page(page) == render_page(page)


def test_tracks_must_cover_the_same_strips(episode):
    """A track of another length is refused by name."""
    with pytest.raises(ShapeError, match="mass of matcher"):
        replace(episode, depth_m=np.ones((STEPS + 1, 3)), reference=None)
