"""The pages in headless Chromium: they fit phone and desk, ask for nothing, are light or dark, and no text of
a picture lies on another or beyond its edge."""

from __future__ import annotations

import html
import json
import re
import shutil
import subprocess
from pathlib import Path

import matplotlib.image
import numpy as np
import pytest
from report_figures import ALL, audit_figures, sheet_figures, shifts, summary_figures

from distill.infer import infer_files
from distill.look import look
from distill.report import write_page
from distill.report.audit_page import write_audit_page
from distill.report.infer_page import write_infer_page
from distill.report.look_page import write_look_page

BROWSER = next(filter(None, map(shutil.which, ("chromium", "chromium-browser", "google-chrome"))), None)
FLAGS = [
    "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--hide-scrollbars",
    "--disable-background-networking", "--disable-component-update", "--disable-sync",
    "--allow-file-access-from-files",
]  # fmt: skip
SAMPLE = Path(__file__).parents[1] / "datasets" / "sample"
MODELS = Path(__file__).parents[1] / "models"
in_browser = pytest.mark.skipif(BROWSER is None, reason="no Chromium on this machine")


def browse(tmp_path: Path, *options: str) -> str:
    profile = tmp_path / "profile"
    done = subprocess.run(
        [str(BROWSER), *FLAGS, f"--user-data-dir={profile}", *options],
        capture_output=True, check=True, timeout=120, text=True,
    )  # fmt: skip
    return done.stdout


@in_browser
@pytest.mark.parametrize("kind", ["front", "summary", "look", "audit"])
def test_nothing_reaches_beyond_a_phone_or_a_desk(kind: str, tmp_path: Path) -> None:
    """Measured by a browser: the page is no wider than its window, and its pictures have a size."""
    if kind == "look":
        write_look_page(look(SAMPLE), tmp_path / "page.html")
    elif kind == "audit":
        write_audit_page(audit_figures(), tmp_path / "page.html")
    else:
        write_page(ALL[kind](), tmp_path / "page.html")
    (tmp_path / "frames.html").write_text(
        """<body><script>
        const found = [];
        for (const width of [320, 390, 768, 1024, 1280]) {
            const frame = document.createElement("iframe");
            frame.width = width; frame.height = 900; frame.src = "page.html";
            frame.onload = () => {
                const page = frame.contentDocument;
                const narrow = [...page.querySelectorAll("svg")].map(s => s.getBoundingClientRect().width);
                const edge = page.querySelector("main").getBoundingClientRect().right + 1;
                const wide = [...page.querySelectorAll("table, .tiles div")].filter(
                    e => e.scrollWidth > e.clientWidth + 1 || e.getBoundingClientRect().right > edge);
                found.push([width, page.documentElement.scrollWidth, wide.map(e => e.textContent),
                    narrow.length, Math.min(...narrow),
                    page.defaultView.performance.getEntriesByType("resource").length]);
                if (found.length == 5) document.body.innerHTML = "<pre>" + JSON.stringify(found) + "</pre>";
            };
            document.body.append(frame);
        }
        </script>"""
    )
    dom = browse(tmp_path, "--virtual-time-budget=20000", "--dump-dom", (tmp_path / "frames.html").as_uri())
    found = re.search(r"<pre>(.*?)</pre>", dom)
    assert found is not None, dom[-2000:]
    measured = json.loads(found[1])
    assert sorted(row[0] for row in measured) == [320, 390, 768, 1024, 1280]
    for width, reach, wide, pictured, narrowest, requests in measured:
        assert reach <= width
        assert wide == [], width
        assert pictured >= {"look": 2, "audit": 3}.get(kind, 8)
        assert narrowest > 250
        assert requests == 0


_TEXTS = """<body><script>
    // Pictures whose texts touch each other or leave the picture, as the browser lays them out.
    const found = {}, widths = WIDTHS, pages = PAGES;
    const jobs = pages.flatMap(name => widths.map(width => [name, width]));
    for (const [name, width] of jobs) {
        const frame = document.createElement("iframe");
        frame.width = width; frame.height = 900; frame.src = name;
        frame.onload = () => {
            const page = frame.contentDocument, faults = [];
            let texts = 0;
            for (const svg of page.querySelectorAll("svg")) {
                const edge = svg.getBoundingClientRect(), label = svg.getAttribute("aria-label");
                const all = [...svg.querySelectorAll("text")].map(
                    t => [t.textContent, t.getBoundingClientRect()]);
                texts += all.length;
                all.forEach(([text, a], i) => {
                    if (a.left < edge.left - 1 || a.right > edge.right + 1 || a.top < edge.top - 1
                        || a.bottom > edge.bottom + 1) faults.push([label, "outside", text]);
                    for (const [other, b] of all.slice(i + 1)) {
                        const across = Math.min(a.right, b.right) - Math.max(a.left, b.left);
                        const up = Math.min(a.bottom, b.bottom) - Math.max(a.top, b.top);
                        if (across > 0.5 && up > 0.5) faults.push([label, text, other]);
                    }
                });
            }
            found[name + " " + width] = [texts, faults];
            if (Object.keys(found).length == jobs.length) {
                const out = document.createElement("pre");
                out.textContent = JSON.stringify(found);
                document.body.replaceChildren(out);
            }
        };
        document.body.append(frame);
    }
    </script>"""


def laid_out(folder: Path, pages: list[str]) -> dict[str, tuple[int, list[list[str]]]]:
    """Page and width -> how many texts its pictures have, and which of them are at fault."""
    script = _TEXTS.replace("WIDTHS", "[390, 1280]").replace("PAGES", json.dumps(pages))
    (folder / "texts.html").write_text(script)
    dom = browse(folder, "--virtual-time-budget=20000", "--dump-dom", (folder / "texts.html").as_uri())
    told = re.search(r"<pre>(.*?)</pre>", dom, re.S)
    assert told is not None, dom[-2000:]
    found: dict[str, tuple[int, list[list[str]]]] = json.loads(html.unescape(told[1]))
    assert len(found) == 2 * len(pages)
    return found


@in_browser
def test_no_text_of_a_picture_lies_on_another_or_beyond_its_edge(tmp_path: Path) -> None:
    """Every kind of page, from shipped sheets and from figures with values of 0 and long names."""
    sheets = [json.loads((MODELS / f"{name}.json").read_text()) for name in ("cold-store", "on-time")]
    write_page(sheets[0] | {"shifts": shifts()}, tmp_path / "cold-store.html")
    write_page(sheets[1], tmp_path / "on-time.html")
    write_page(summary_figures(), tmp_path / "summary.html")
    write_look_page(look(SAMPLE), tmp_path / "look.html")
    traces = [str(SAMPLE.parent / "traces" / "cliff_walking.jsonl.gz")]
    write_infer_page(infer_files(traces, tmp_path / "family.toml").figures, tmp_path / "infer.html")
    write_audit_page(audit_figures(), tmp_path / "audit.html")
    pages = ["cold-store.html", "on-time.html", "summary.html", "look.html", "infer.html", "audit.html"]
    found = laid_out(tmp_path, pages)
    assert {place: faults for place, (_, faults) in found.items() if faults} == {}
    assert min(texts for texts, _ in found.values()) > 15


@in_browser
def test_texts_that_touch_or_leave_are_found(tmp_path: Path) -> None:
    """The check itself: what overlaps and what is cut off fails it."""
    (tmp_path / "bad.html").write_text(
        '<svg aria-label="bad" viewBox="0 0 100 50" width="100" height="50">'
        '<text x="5" y="20">one</text><text x="12" y="22">two</text><text x="80" y="45">far out</text></svg>'
    )
    for _, faults in laid_out(tmp_path, ["bad.html"]).values():
        assert sorted(f[1:] for f in faults) == [["one", "two"], ["outside", "far out"]]


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
