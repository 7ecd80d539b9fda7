"""The report page in headless Chromium: it fits phone and desk, asks for nothing, and is light or dark."""

from __future__ import annotations

import json
import re
import shutil
import subprocess
from pathlib import Path

import matplotlib.image
import numpy as np
import pytest
from report_figures import ALL, sheet_figures

from distill.report import write_page

BROWSER = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--hide-scrollbars",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--allow-file-access-from-files",
]  # fmt: skip
in_browser = pytest.mark.skipif(BROWSER is None, reason="no Chromium on this machine")


def browse(tmp_path: Path, *options: str) -> str:
    profile = tmp_path / "profile"
    done = subprocess.run(
        [str(BROWSER), *FLAGS, f"--user-data-dir={profile}", *options],
        capture_output=True, check=True, timeout=120, text=True,
    )  # fmt: skip
    return done.stdout


@in_browser
@pytest.mark.parametrize("kind", ["front", "summary"])
def test_nothing_reaches_beyond_a_phone_or_a_desk(kind: str, tmp_path: Path) -> None:
    """Measured by a browser: the page is no wider than its window, and its pictures have a size."""
    write_page(ALL[kind](), tmp_path / "page.html")
    (tmp_path / "frames.html").write_text(
        """<body><script>
        const found = [];
        for (const width of [320, 390, 768, 1280]) {
            const frame = document.createElement("iframe");
            frame.width = width; frame.height = 900; frame.src = "page.html";
            frame.onload = () => {
                const page = frame.contentDocument;
                const narrow = [...page.querySelectorAll("svg")].map(s => s.getBoundingClientRect().width);
                found.push([width, page.documentElement.scrollWidth, narrow.length, Math.min(...narrow),
                    page.defaultView.performance.getEntriesByType("resource").length]);
                if (found.length == 4) document.body.innerHTML = "<pre>" + JSON.stringify(found) + "</pre>";
            };
            document.body.append(frame);
        }
        </script>"""
    )
    dom = browse(tmp_path, "--virtual-time-budget=20000", "--dump-dom", (tmp_path / "frames.html").as_uri())
    found = re.search(r"<pre>(.*?)</pre>", dom)
    assert found is not None, dom[-2000:]
    measured = json.loads(found[1])
    assert sorted(row[0] for row in measured) == [320, 390, 768, 1280]
    for width, reach, pictured, narrowest, requests in measured:
        assert reach <= width
        assert pictured >= 8
        assert narrowest > 250
        assert requests == 0


@in_browser
@pytest.mark.parametrize(("scheme", "paper"), [(1, (0xFF, 0xFF, 0xFF)), (0, (0x14, 0x18, 0x1D))])
def test_it_is_light_or_dark_as_its_reader(scheme: int, paper: tuple[int, int, int], tmp_path: Path) -> None:
    write_page(sheet_figures(), tmp_path / "page.html")
    shot = tmp_path / "shot.png"
    browse(
        tmp_path,
        f"--blink-settings=preferredColorScheme={scheme}",
        "--window-size=390,1600",
        f"--screenshot={shot}",
        (tmp_path / "page.html").as_uri(),
    )
    pixels = (255 * matplotlib.image.imread(shot)[:, :, :3]).round().astype(int)
    assert tuple(pixels[2, 2]) == paper
    inked = np.any(np.abs(pixels - np.array(paper)) > 60, axis=2)
    assert 0.01 < inked.mean() < 0.5  # words and lines, on paper
    assert inked[800:].any()
