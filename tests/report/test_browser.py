"""The page in a real browser without a network."""

import re
import shutil
import subprocess
import tempfile
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

from learnfilter.report.page import render_page
from tests.report.samples import COLUMNS, ROWS, STEPS

BROWSER = shutil.which("chromium") or shutil.which("chromium-browser")
pytestmark = pytest.mark.skipif(BROWSER is None, reason="no chromium on this machine")


def browse(address: str, *options: str) -> str:
    """Open an address with every host unknown and return what the browser prints."""
    with tempfile.TemporaryDirectory() as profile:
        common = ["--headless", "--no-sandbox", "--disable-gpu", "--disable-background-networking"]
        closed = ["--host-resolver-rules=MAP * ~NOTFOUND", f"--user-data-dir={profile}"]
        command = [str(BROWSER), *common, *closed, "--virtual-time-budget=9000", *options, address]
        return subprocess.run(command, capture_output=True, text=True, timeout=60, check=True).stdout


def save(page, path: Path, script: str = "") -> str:
    """Write the page, with a script of the test's own at its end; return its address."""
    path.write_text(
        render_page(page).replace("</body>", f"<script>{script}</script></body>"), encoding="utf-8"
    )
    return path.as_uri()


@pytest.fixture
def first_drive():
    """Cut the first player out of a dumped page."""
    return lambda dom: dom[dom.index('id="drive-1"') : dom.index('id="drive-2"')]


def test_the_address_chooses_the_step(page, tmp_path, first_drive):
    """#step=5 shows strip 5: label, slider, frame (fifth of the sheet), spoken description, readout."""
    player = first_drive(browse(save(page, tmp_path / "p.html") + "#step=5", "--dump-dom"))
    assert f">strip 5 of {STEPS}</output>" in player
    assert re.search(r'<input type="range"[^>]* value="5"', player)
    across = int(re.search(r'data-across="(\d+)"', player).group(1))
    corner = f"{4 % across * COLUMNS} {4 // across * ROWS}"
    assert f'viewBox="{corner} {COLUMNS} {ROWS}"' in player
    assert f"Belief of matcher after strip 5 of {STEPS}" in player
    assert "estimate off by 0.50 m and 10\u00b0" in player


def test_rays_start_at_the_robot_and_end_where_the_strip_says(page, tmp_path, first_drive):
    """From (1, 1) facing north, 2 m at -90 and at 90 degrees: to (3, 1) and (-1, 1); NaN draws nothing."""
    player = first_drive(browse(save(page, tmp_path / "p.html"), "--dump-dom"))
    assert 'class="ray" d="M1.00 1.00L3.00 1.00M1.00 1.00L-1.00 1.00"' in player


def test_arrow_keys_walk_and_play_runs_to_the_end(page, tmp_path, first_drive):
    """From step 3, right twice and left once is step 4, in the address too; Play then ends at the last."""
    script = """
      const press = (key) => document.body.dispatchEvent(new KeyboardEvent("keydown", {key, bubbles: true}));
      press("ArrowRight"); press("ArrowRight"); press("ArrowLeft");
      document.title = location.hash;
      document.querySelector(".play").click();
    """
    dom = browse(save(page, tmp_path / "p.html", script) + "#step=3", "--dump-dom")
    assert "<title>#drive=1&amp;step=4</title>" in dom
    player = first_drive(dom)
    assert f">strip {STEPS} of {STEPS}</output>" in player and ">Play</button>" in player


def test_the_second_drive_can_be_asked_for(page, tmp_path):
    """#drive=2 hides the first player."""
    dom = browse(save(page, tmp_path / "p.html") + "#drive=2&step=1", "--dump-dom")
    hidden = re.findall(r'<article class="player" id="(drive-\d)" hidden', dom)
    assert hidden == ["drive-1"]


def test_the_page_does_not_scroll_sideways_on_a_phone(page, tmp_path):
    """In a frame 390 px wide the document is no wider than the frame, long hostile names and all."""
    save(page, tmp_path / "p.html", "parent.postMessage(document.documentElement.scrollWidth, '*')")
    listen = "<script>onmessage = (e) => { document.title = e.data; }</script>"
    frame = listen + '<iframe width="390" src="p.html"></iframe>'
    (tmp_path / "frame.html").write_text(frame, encoding="utf-8")
    dom = browse((tmp_path / "frame.html").as_uri(), "--dump-dom")
    assert int(re.search(r"<title>(\d+)</title>", dom).group(1)) <= 390


def test_the_belief_is_seen_where_it_is(page, tmp_path):
    """Certainty in column 0 at strip 1 and in column 7 at strip 8: the dark patch moves seven cells right."""
    save(page, tmp_path / "p.html")
    views = [f'<iframe width="390" height="1200" src="p.html#step={step}"></iframe>' for step in (1, 8)]
    (tmp_path / "frame.html").write_text('<body style="margin:0;display:flex">' + "".join(views))
    picture, address = tmp_path / "shot.png", (tmp_path / "frame.html").as_uri()
    browse(address, f"--screenshot={picture}", "--window-size=800,1200")
    with Image.open(picture) as image:
        shot = np.asarray(image.convert("RGB")).astype(int)
    dark = np.abs(shot - [68, 1, 84]).max(axis=-1) <= 2  # viridis' dark end
    left, right = (np.nonzero(half)[1] for half in (dark[:, :394], dark[:, 394:]))
    assert min(len(left), len(right)) > 500
    # A panel is 300 to 350 px wide and shows 4.24 m, so seven cells are 250 to 290 px; markers hide a little.
    assert np.median(right) - np.median(left) == pytest.approx(270, abs=30)
