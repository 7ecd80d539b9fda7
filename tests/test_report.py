"""The report page: figures as in the JSON, nothing from outside, every text escaped, the same bytes again."""

from __future__ import annotations

import copy
import json
import re
import subprocess
import sys
import xml.etree.ElementTree as ET
from collections.abc import Iterator
from html.parser import HTMLParser
from itertools import combinations
from pathlib import Path
from typing import Any

import matplotlib
import matplotlib.image
import numpy as np
import pytest
from ladder import EXACT, PUBLISHED
from matplotlib.backends.backend_agg import FigureCanvasAgg
from report_figures import (
    accuracy,
    estimate,
    every_kind,
    front_figures,
    scorer,
    sheet_figures,
    shifts,
    summary_figures,
)
from small_dataset import labelled

from distill.break_even import break_even
from distill.cli import run
from distill.errors import InputError
from distill.report import CAUTION, axes, charts, front_svg, more_pictures, page, pictures, theme, write_page
from distill.report.elements import duration, text_of
from distill.report.words import COLUMNS, WORDS
from distill.ship import ship
from distill.train import train
from distill.validate import validate

VOID = {"meta", "br"}


_SHOWN: dict[int, str] = {}


def shown(figures: dict[str, Any]) -> str:
    """The page of one of the kinds, made once."""
    if id(figures) not in _SHOWN:
        _SHOWN[id(figures)] = page(figures)
    return _SHOWN[id(figures)]


def parsed(text: str) -> ET.Element:
    return ET.fromstring(text.removeprefix("<!DOCTYPE html>"))


def numbers_in(x: Any) -> Iterator[float]:
    if isinstance(x, dict):
        for value in x.values():
            yield from numbers_in(value)
    elif isinstance(x, list):
        yield from (n for value in x for n in numbers_in(value))
    elif isinstance(x, int | float):
        yield x


def text_in(e: ET.Element | None) -> str:
    assert e is not None
    return "".join(e.itertext())


# --- the page as a document ------------------------------------------------------------------------


@every_kind
def test_it_is_xml_and_html_with_links_that_hold(figures: dict[str, Any]) -> None:
    text = shown(figures)
    root = parsed(text)
    ids = [e.get("id") for e in root.iter() if e.get("id")]
    assert len(ids) == len(set(ids)) > 0
    links = re.findall(r'(?:href="|url\()#([^")]*)', text)
    assert links
    assert set(links) <= set(ids)

    class Tags(HTMLParser):
        """Outside of SVG, HTML closes only void elements within their tag."""

        depth = 0

        def handle_startendtag(self, tag: str, _: Any) -> None:
            assert self.depth > 0 or tag in VOID, tag

        def handle_starttag(self, tag: str, _: Any) -> None:
            assert tag not in VOID
            self.depth += tag == "svg"

        def handle_endtag(self, tag: str) -> None:
            self.depth -= tag == "svg"

    Tags().feed(text)


@every_kind
def test_it_asks_for_nothing_and_runs_nothing(figures: dict[str, Any]) -> None:
    text = shown(figures)
    assert "http" not in text.replace('http-equiv="Content-Security-Policy"', "")
    assert "@import" not in text
    assert all(target.startswith("#") for target in re.findall(r"url\(([^)]*)", text))
    for e in parsed(text).iter():
        assert e.tag not in {"script", "link", "img", "image", "iframe", "object", "embed", "base"}
        assert not any(name.startswith("on") or name in {"src", "srcset"} for name in e.attrib)
        assert e.get("href", "#").startswith("#")


@every_kind
def test_the_caution_and_every_word_stand_on_it(figures: dict[str, Any]) -> None:
    root = parsed(shown(figures))
    assert CAUTION in text_in(root)
    for name in [*figures.get("scorer", figures)["beside"], *COLUMNS.values()]:
        assert name.removesuffix(", %") in WORDS
    pictured = root.findall(".//figure")
    assert len(pictured) >= 4
    for figure in pictured:
        picture = figure.find("svg")
        assert picture is not None
        assert picture.get("aria-label")
        assert len(text_in(figure.find("figcaption"))) > 40


@every_kind
def test_the_same_figures_give_the_same_bytes(figures: dict[str, Any]) -> None:
    text = page(figures)
    with matplotlib.rc_context({"svg.fonttype": "path", "lines.linewidth": 9, "font.size": 30}):
        assert page(copy.deepcopy(figures)) == text


def test_another_process_gives_the_same_bytes(tmp_path: Path) -> None:
    figures = summary_figures()
    (tmp_path / "figures.json").write_text(json.dumps(figures))
    code = "import json, sys; from distill.report import write_page; "
    code += "write_page(json.load(sys.stdin), 'page.html')"
    with (tmp_path / "figures.json").open() as given:
        subprocess.run([sys.executable, "-c", code], cwd=tmp_path, stdin=given, check=True)
    assert (tmp_path / "page.html").read_bytes() == page(figures).encode()


# --- figures ---------------------------------------------------------------------------------------


@every_kind
def test_every_figure_is_one_of_the_json(figures: dict[str, Any]) -> None:
    known = set(numbers_in(figures)) | {4}  # 4 pairs are drawn
    data = list(parsed(shown(figures)).iter("data"))
    assert len(data) > 60
    for e in data:
        value = json.loads(e.get("value", ""))
        assert value in known
        assert e.text == (duration(value).text if e.get("class") == "duration" else text_of(value))


def rows_of(root: ET.Element, title: str) -> dict[str, list[list[float]]]:
    """Name -> cells, each the exact values of the figures in it, of the table below a heading."""
    (section,) = (s for s in root.iter("section") if (text_in(s.find("h2"))).startswith(title))

    def cells(tr: ET.Element) -> list[list[float]]:
        return [[float(d.get("value", "")) for d in td.iter("data")] for td in tr.iter("td")]

    return {tr.findtext("th", ""): cells(tr) for tr in section.findall(".//tbody/tr")}


def spread(e: dict[str, Any]) -> list[float]:
    return [e[k] for k in ("value", "low", "high") if k in e]


@every_kind
def test_tables_hold_the_right_figures_in_the_right_cells(figures: dict[str, Any]) -> None:
    root = parsed(shown(figures))
    top = figures.get("scorer", figures)
    scorers = top.get("scorers") or top["front"]
    trained = rows_of(root, "The scorers that were trained")
    assert list(trained) == [e["recipe"] for e in scorers]
    for e in scorers:
        shares = [spread(e["held_out"][k]) for k in ("forgone_percent", "relative_forgone_percent")]
        rest = [e["latency"]["p50_us"], e["latency"]["p99_us"], e["bytes"], e["fit_seconds"]]
        assert trained[e["recipe"]] == [*shares, *([x] for x in rest)]

    judged = rows_of(root, "Accuracy on held-out trees")
    judging = {"this scorer": top["accuracy"]} if "accuracy" in top else {}
    judging = judging or {e["recipe"]: e["held_out"] for e in scorers if e["on_front"]}
    peers = {name: m for name, m in top["peers"].items() if name not in top["beside"]}
    assert list(judged) == [*judging, *top["beside"], *peers]
    for name, m in {**judging, **top["beside"], **peers}.items():
        cells = [m.get(k, {}) for k in COLUMNS]
        assert judged[name] == [spread(c) if isinstance(c, dict) else [c] for c in cells]

    times = rows_of(root, "Time of one decision")
    exact = top["exact"] if "exact" in top else top["decision"]["exact"]
    for name, t in exact.items():
        assert times[f"exact {name}"][:3] == [[t["p50_us"]], [t["p99_us"]], [t["calls"]]]
    assert times["UCT"][:3] == [[8.13], [15.5], [400]]
    shown_slices = rows_of(root, "By slice of trees")
    assert shown_slices["leaves: 2 to 17"] == [
        [577],
        [14902],
        spread(estimate(0.0321)),
        spread(estimate(1.5)),
        [94.4],
    ]
    if "shifts" in top:
        changed = rows_of(root, "Trees unlike those of training")
        assert list(changed) == ["as given", "one level deeper", "correlation"]
        assert changed["correlation"] == [
            [1754], spread(estimate(12.5)), spread(estimate(2.1)), [14.2], [95.2], [61.3], [61.3]
        ]  # fmt: skip
        assert changed["one level deeper"][-1] == []
        assert "what correlation changes" in text_in(root)
    if "decision" in top:
        assert times["exact dynamic rate"][3] == [281.254]
        assert times["this scorer"][0] == [36.6]
    if "on traces" in figures:
        on_traces = rows_of(root, "Accuracy on recorded trees")
        assert on_traces["scorer trained on traces"][0] == spread(estimate(0.58))
        tree = rows_of(root, "One tree")
        assert tree == {"leaf 0": [[0.0001368], [0.00014]], "leaf 1": [[0.0], [2.2e-22]]}


@pytest.fixture
def drawn(monkeypatch: pytest.MonkeyPatch) -> dict[str, Any]:
    """The figures that become pictures, by name."""
    caught: dict[str, Any] = {}

    def svg(figure: Any, name: str, meaning: str) -> ET.Element:
        caught[name] = figure
        return theme.svg(figure, name, meaning)

    monkeypatch.setattr(pictures, "svg", svg)
    monkeypatch.setattr(more_pictures, "svg", svg)
    return caught


def lines(figure: Any, gid: str, panel: int = 0) -> list[tuple[list[float], list[float]]]:
    found = [line for line in figure.axes[panel].lines if line.get_gid() == gid]
    return [(list(map(float, line.get_xdata())), list(map(float, line.get_ydata()))) for line in found]


def dots(figure: Any, panel: int, gid: str = "value") -> list[float]:
    return [x for (x,), _ in lines(figure, gid, panel)]


def test_the_front_stands_where_the_figures_say(drawn: dict[str, Any]) -> None:
    figures = front_figures()
    figures["beside"]["static closed form"]["latency"] = {"p50_us": 12.5, "p99_us": 20.0, "calls": 9}
    page(figures)
    by_time = sorted(figures["scorers"], key=lambda e: e["latency"]["p50_us"])
    loss = {e["recipe"]: e["held_out"]["forgone_percent"] for e in by_time}
    time = {e["recipe"]: e["latency"]["p50_us"] for e in by_time}
    assert lines(drawn["front"], "scorer") == [([time[n]], [loss[n]["value"]]) for n in loss]
    intervals = [([time[n], time[n]], [loss[n]["low"], loss[n]["high"]]) for n in loss]
    assert lines(drawn["front"], "interval") == intervals
    on_front = ["linear", "dense 32-32", "boosting 100x31"]  # in order of time
    assert lines(drawn["front"], "front") == [
        ([time[n] for n in on_front], [loss[n]["value"] for n in on_front])
    ]
    peers = lines(drawn["front"], "peer")
    assert peers[0] == ([12.5], [23.76])
    assert peers[1] == ([26.1], [9.843])
    assert peers[2][1] == [88.82, 88.82]  # a line across: its time is not known
    assert peers[3] == ([8.13], [42.99])
    assert drawn["front"].axes[0].get_xscale() == drawn["front"].axes[0].get_yscale() == "log"


def test_bars_and_pairs_stand_where_the_figures_say(drawn: dict[str, Any]) -> None:
    figures = summary_figures()
    page(figures)
    sheet = figures["scorer"]
    rows = [sheet["accuracy"], *sheet["beside"].values(), sheet["peers"]["UCT"]]
    for panel, key in enumerate(("forgone_percent", "relative_forgone_percent")):
        assert dots(drawn["loss"], panel) == [m[key]["value"] for m in rows]
        assert [x for x, _ in lines(drawn["loss"], "interval", panel)] == [
            spread(m[key])[1:] for m in (*rows[:3], rows[4])
        ]
        on_traces = [m[key]["value"] for m in figures["on traces"].values()]
        assert dots(drawn["traces"], panel) == on_traces
    assert dots(drawn["time"], 0) == [36.6, 26.1, 8.13, 318.8, 10293.9]
    assert drawn["time"].axes[0].get_xscale() == "log"
    least = sheet["pairs"]["least"]
    exact, predicted = ([max(x, least) for x in sheet["pairs"][k]] for k in ("exact", "predicted"))
    assert lines(drawn["pairs-0"], "pairs") == [(exact, predicted)]


def test_slices_bounds_prices_and_gains_stand_where_the_figures_say(drawn: dict[str, Any]) -> None:
    figures = sheet_figures()
    text = page(figures)
    accuracy = figures["accuracy"]
    floor = drawn["slices"].axes[0].get_xlim()[0]
    assert dots(drawn["slices"], 0) == [0.0321, floor]  # what lost nothing stands on the edge
    assert drawn["slices"].axes[0].get_xticklabels()[0].get_text() == "0"
    assert len(drawn["slices"].axes) == 1  # the gap has one slice only
    assert "all trees are in one slice: gap" in text
    assert dots(drawn["shifts"], 0) == [0.0213, 0.35, 12.5]
    assert dots(drawn["shifts"], 0, "rival") == [0.77, 1.23, 14.2]
    bins = accuracy["calibration"]["bins"]
    scores = [b["mean_score"] for b in bins]
    assert lines(drawn["bound"], "curve") == [(scores, [b["covered_percent"] for b in bins])]
    assert lines(drawn["bound"], "across")[0][1] == [95.0, 95.0]
    ratios = [b["mean_exact"] / b["mean_score"] for b in bins]
    assert lines(drawn["sizes"], "curve") == [(scores, ratios)]
    stop = {key: [p[key] for p in accuracy["stop_curve"]] for key in ("price", "value", "go_on")}
    ours, _, never = lines(drawn["stop"], "curve")
    floor = drawn["stop"].axes[0].get_ylim()[0]
    assert ours == (stop["price"], [max(y, floor) for y in stop["value"]])
    assert never == (stop["price"], stop["go_on"])
    found = figures["break_even"]
    curves_ = lines(drawn["break-even"], "curve")
    assert [y for _, y in curves_] == list(found["gain_percent"].values())
    assert curves_[0][0] == [c / 1000 for c in found["costs_us"]]
    (last,) = (b for b in found["best"] if b["to_us"] is None)
    assert last["name"] == "exact dynamic rate"
    assert f'<data value="{last["from_us"]!r}" class="duration">' in text
    assert "one scoring for each rollout" in drawn["break-even"].axes[0].get_xlabel()
    assert "every rollout costs one scoring" in text
    assert "&lt;b&gt;" in text
    assert "<b>" not in text


def test_peers_say_on_how_many_trees_and_why_some_are_missing() -> None:
    figures = front_figures()
    del figures["peers"]["UCT"]["trees"]  # as older versions left them
    assert "on a part of the trees" in page(figures)
    figures["peers"]["UCT"]["trees"] = 1000
    figures["peers_left_out"] = dict.fromkeys(("Monte Carlo", "Thompson"), "they need <tables>")
    text = page(figures)
    assert "on 1,000 of the trees" in text
    assert "Not measured: Monte Carlo, Thompson (they need &lt;tables&gt;)." in text
    figures["peers"]["UCT"]["trees"] = figures["parts"]["held_out"]["trees"]
    assert "of the trees</span>" not in page(figures)


def test_what_the_backup_takes_stands_beside_the_scorer(drawn: dict[str, Any]) -> None:
    figures = front_figures()
    figures["backup"] = {"after one rollout": {"p50_us": 21.5, "p99_us": 30.0, "calls": 50}}
    assert rows_of(parsed(page(figures)), "Time of one decision")["backup after one rollout"][0] == [21.5]
    assert 21.5 in dots(drawn["time"], 0)


def test_the_shipped_scorer_is_among_the_curves_wherever_it_stands(drawn: dict[str, Any]) -> None:
    """It is best nowhere here, and another scorer gains more where rollouts are dear."""
    figures = sheet_figures()
    ways = {"dense 32-32": (0.5, 36.6), "linear": (0.4, 20.0), "exact dynamic rate": (0.0, 10293.9)}
    figures["break_even"] = break_even(ways)
    page(figures)
    gains = figures["break_even"]["gain_percent"]
    ours, exact = gains["dense 32-32"], gains["exact dynamic rate"]
    assert [y for _, y in lines(drawn["break-even"], "curve")] == [ours, gains["linear"], exact]


@pytest.mark.parametrize("lost", ["slices", "calibration", "stop_curve"])
def test_older_figures_without_parts_serve(lost: str) -> None:
    sheet = sheet_figures()
    before = page(sheet).count("<figure")
    del sheet["accuracy"][lost]
    del sheet["break_even"], sheet["peers"], sheet["shifts"]
    assert page(sheet).count("<figure") == before - 2 - (2 if lost == "calibration" else 1)


def test_a_loss_of_zero_stands_on_an_edge_marked_zero(drawn: dict[str, Any]) -> None:
    figures = front_figures()
    figures["scorers"][3] = scorer("dense 32-32", 36.6, 0.0, True)
    figures["scorers"][0] = scorer("linear", 24.1, None, True)
    root = parsed(page(figures))
    ax = drawn["front"].axes[0]
    floor = ax.get_ylim()[0]
    assert ax.get_yticks()[0] == floor
    assert ax.get_yticklabels()[0].get_text() == "0"
    assert ([36.6], [floor]) in lines(drawn["front"], "scorer")
    assert 24.1 not in [x for (x,), _ in lines(drawn["front"], "scorer")]  # no loss is known
    assert rows_of(root, "The scorers that were trained")["linear"][0] == []


def test_figures_keep_three_digits_and_nearly_all_is_not_all() -> None:
    assert text_of(99.99987) == "99.9999"
    assert text_of(0.0005839) == "5.84 × 10⁻⁴"  # noqa: RUF001
    rng = np.random.default_rng(0)
    for x in 10 ** rng.uniform(-30, 7, 300):
        plain = re.sub(r" × 10(\S+)", lambda m: "e" + m[1].translate(_LOWERED), text_of(x))  # noqa: RUF001
        assert float(plain.replace(",", "")) == pytest.approx(x, rel=PUBLISHED * 1e-2, abs=EXACT)


_LOWERED = str.maketrans("⁻⁰¹²³⁴⁵⁶⁷⁸⁹", "-0123456789")


# --- pictures --------------------------------------------------------------------------------------


def test_labels_do_not_hide_one_another(drawn: dict[str, Any]) -> None:
    page(sheet_figures())
    ax = drawn["front"].axes[0]
    renderer = FigureCanvasAgg(drawn["front"]).get_renderer()
    boxes = [t.get_window_extent(renderer) for t in ax.texts]
    assert len(boxes) == 8  # four scorers, three picks beside, one more peer
    for a, b in combinations(boxes, 2):
        assert not a.overlaps(b)
    inside = ax.get_window_extent(renderer).padded(1)
    assert all(inside.contains(*corner) for b in boxes for corner in (b.min, b.max))


def test_names_of_crowded_points_find_room() -> None:
    """Ten scorers that lose and take the same, with peers around them: every name stands, none on another."""
    points = [
        charts.Point(f"boosting {i}x{31 + i}", 50 + i / 9, 0.1, 0.05, 0.2, joined=True) for i in range(10)
    ]
    peers = [charts.Peer("moment matching with quadrature", 0.11, 51.0), charts.Peer("random pick", 80.0)]
    figure = charts.front(points, peers, x_label="x", y_label="y")
    ax, renderer = figure.axes[0], FigureCanvasAgg(figure).get_renderer()
    boxes = [t.get_window_extent(renderer) for t in ax.texts]
    assert len(boxes) == 12
    assert not any(a.overlaps(b) for a, b in combinations(boxes, 2))
    assert figure.findobj(
        lambda x: x.get_gid() == "leader"
    )  # names that stand further off are joined to their points


@pytest.mark.parametrize(
    ("limits", "zero", "texts"),
    [
        ((250, 950), None, ["300", "500", "700"]),
        ((4, 400), None, ["10", "30", "100", "300"]),
        ((1e-3, 1e3), None, ["0.001", "0.01", "0.1", "1", "10", "100", "1,000"]),
        ((1e-12, 10), None, ["10⁻¹¹", "10⁻⁹", "10⁻⁷", "10⁻⁵", "10⁻³", "10⁻¹", "10"]),
        ((1e-4, 1), 1e-4, ["0", "0.001", "0.01", "0.1", "1"]),
        ((1.1, 1.9), None, ["1.2", "1.4", "1.6", "1.8"]),
    ],
)
def test_log_axes_have_ticks_to_read(
    limits: tuple[float, float], zero: float | None, texts: list[str]
) -> None:
    _, (ax,) = axes.canvas(100)
    ax.set_xscale("log")
    ax.set_xlim(limits)
    axes.log_ticks(ax.xaxis, limits, zero_at=zero)
    assert [t.get_text() for t in ax.get_xticklabels()] == texts


def contrast(a: str, b: str) -> float:
    """Contrast of two colours, W3C WCAG 2.2 (2023), definition of contrast ratio."""

    def luminance(colour: str) -> float:
        c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
        linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722])

    low, high = sorted((luminance(a), luminance(b)))
    return (high + 0.05) / (low + 0.05)


def test_both_themes_can_be_read() -> None:
    light, dark = (dict(re.findall(r"--(\w+):(#\w+)", part)) for part in theme.THEME_CSS.split("@media"))
    assert light.keys() == dark.keys()
    assert contrast(light["paper"], "#000000") == 21
    for colours in (light, dark):
        for role in ("ink", "quiet", "scorer", "peer", "exact", "uct"):
            assert contrast(colours[role], colours["paper"]) >= 4.5


# Linear RGB as those see it who lack one kind of cone: Machado, Oliveira and Fernandes (2009), "A
# physiologically-based model for simulation of color vision deficiency", severity 1; quoted from memory.
SIGHTS = {
    "three cones": [[1, 0, 0], [0, 1, 0], [0, 0, 1]],
    "no L cones": [
        [0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998],
    ],
    "no M cones": [
        [0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881],
    ],
    "no S cones": [
        [1.255528, -0.076749, -0.178779], [-0.078411, 0.930809, 0.147602], [0.004733, 0.691367, 0.303900],
    ],
}  # fmt: skip


def lab(colour: str, sight: str) -> np.ndarray:
    """CIE 1976 L*a*b* under D65 (IEC 61966-2-1 for sRGB) of a colour as it is seen."""
    c = np.array([int(colour[i : i + 2], 16) for i in (1, 3, 5)]) / 255
    linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
    seen = np.clip(SIGHTS[sight] @ linear, 0, 1)
    to_xyz = [[0.4124, 0.3576, 0.1805], [0.2126, 0.7152, 0.0722], [0.0193, 0.1192, 0.9505]]
    t = to_xyz @ seen / [0.9505, 1, 1.089]
    x, y, z = np.where(t > (6 / 29) ** 3, np.cbrt(t), t * (29 / 6) ** 2 / 3 + 4 / 29)
    return np.array([116 * y - 16, 500 * (x - y), 200 * (y - z)])


def test_policies_are_told_apart_by_colour_whatever_cones_one_has() -> None:
    """Differences of 10 and more are plain at a glance; marks and dashes differ besides."""
    light, dark = (dict(re.findall(r"--(\w+):(#\w+)", part)) for part in theme.THEME_CSS.split("@media"))
    for colours in (light, dark):
        for a, b in combinations(("ink", "scorer", "peer", "exact", "uct"), 2):
            for sight in SIGHTS:
                assert np.linalg.norm(lab(colours[a], sight) - lab(colours[b], sight)) >= 10, (a, b, sight)


@every_kind
def test_the_front_alone_is_a_picture_with_its_own_colours(figures: dict[str, Any]) -> None:
    text = front_svg(figures)
    root = ET.fromstring(text)
    assert root.tag == "{http://www.w3.org/2000/svg}svg"
    assert text.count("http") == 1
    assert "prefers-color-scheme:dark" in text
    used = set(re.findall(r"var\(--(\w+)\)", text))
    assert {"ink", "paper", "scorer", "peer"} <= used <= set(re.findall(r"--(\w+):#", text))
    body = text.partition("</style>")[2]
    assert not re.search(r"#[0-9a-f]{6}\b", body)  # every colour is the theme's
    assert not re.search(r"#[0-9a-f]{6}\b", page(figures).partition("</style>")[2].replace("#m", ""))
    assert front_svg(copy.deepcopy(figures)) == text


# --- what comes from files -------------------------------------------------------------------------

HOSTILE = '<script src="http://evil.example/x.js">&\'"]]><!-- $\\frac{$ %s {0} \x00\x1b\ud800\u202e\n世界'


def test_hostile_names_are_text() -> None:
    figures = summary_figures()
    sheet = figures["scorer"]
    harmless = page(figures)
    sheet["file"]["name"] = sheet["recipe"] = sheet["front"][0]["recipe"] = sheet["chosen"] = HOSTILE
    sheet["data"] |= {"source": HOSTILE, HOSTILE: HOSTILE}
    sheet["made_with"] = {HOSTILE: HOSTILE}
    sheet["features"] = [HOSTILE]
    sheet["beside"][HOSTILE] = accuracy(1.0, 2.0)
    sheet["decision"]["exact"][HOSTILE] = {"p50_us": 5.0, "p99_us": 6.0, "calls": 1}
    figures["on traces"][HOSTILE] = accuracy(1.0, 2.0)
    text = page(figures)
    root = parsed(text)
    assert {e.tag for e in root.iter()} == {e.tag for e in parsed(harmless).iter()}
    assert not [c for c in root.iter() if callable(c.tag)]  # no comment either
    seen = HOSTILE.replace("\n", " ").translate(
        {0: "\ufffd", 0x1B: "\ufffd", 0xD800: "\ufffd", 0x202E: "\ufffd"}
    )
    assert text_in(root.find(".//h1")) == seen
    assert [th.text for th in root.iter("th")].count(seen) >= 3
    assert "<script" not in text
    picture = front_svg(figures)
    assert "<script" not in picture
    ET.fromstring(picture)


def test_a_picture_cuts_long_names_and_the_table_does_not() -> None:
    figures = front_figures()
    long = "boosting " * 40
    figures["scorers"][0]["recipe"] = long
    root = parsed(page(figures))
    assert any(th.text == long.strip() for th in root.iter("th"))
    assert max(len(t.text or "") for svg in root.iter("svg") for t in svg.iter("text")) < 60


def without(*path: Any) -> dict[str, Any]:
    figures = front_figures()
    inner: Any = figures
    for key in path[:-1]:
        inner = inner[key]
    del inner[path[-1]]
    return figures


def with_(value: Any, *path: Any) -> dict[str, Any]:
    figures = front_figures()
    inner: Any = figures
    for key in path[:-1]:
        inner = inner[key]
    inner[path[-1]] = value
    return figures


@pytest.mark.parametrize(
    ("figures", "says"),
    [
        ({}, "format"),
        ({"format": "voc-front/2"}, "voc-front/2"),
        ({"scorer": {"format": "belief-tree/1"}}, "belief-tree/1"),
        ([1, 2], "report"),
        (without("beside"), "beside"),
        (without("exact", "dynamic VOC", "p99_us"), "p99_us"),
        (without("scorers", 2, "held_out", "relative_forgone_percent"), "relative_forgone_percent"),
        (without("scorers", 0, "pairs", "least"), "least"),
        (without("parts", "held_out"), "held_out"),
        (with_("fast", "scorers", 1, "latency", "p50_us"), "fast"),
        (with_(0.0, "scorers", 1, "latency", "p50_us"), "p50_us"),
        (with_(float("nan"), "beside", "random pick", "forgone_percent", "value"), "nan"),
        (with_(True, "scorers", 1, "bytes"), "True"),
        (with_([1.0], "scorers", 0, "pairs", "exact"), "report"),
        (with_(None, "scorers"), "report"),
        (with_("soon", "value", "horizon"), "soon"),
    ],
)
def test_figures_that_lack_a_part_are_refused_by_name(figures: Any, says: str, tmp_path: Path) -> None:
    with pytest.raises(InputError) as refused:
        write_page(figures, tmp_path / "page.html")
    assert says in str(refused.value)
    assert list(tmp_path.iterdir()) == []


def test_older_figures_without_pairs_serve() -> None:
    sheet = sheet_figures()
    sheet["pairs"] = None
    figures = front_figures()
    for e in figures["scorers"]:
        del e["pairs"]
    assert "exact and by" not in page(sheet) + page(figures)
    assert "exact and by" in page(sheet_figures())


# --- on what the other commands leave --------------------------------------------------------------


def any_slice_lost(front: dict[str, Any]) -> bool:
    """Whether the picture of slices has something to show."""
    by: dict[str, list[float]] = {}
    for one in front["scorers"][0]["held_out"]["slices"]:
        by.setdefault(one["by"], []).append(one["forgone_percent"]["value"] or 0.0)
    return any(len(lost) > 1 and max(lost) >= 1e-4 for lost in by.values())


def test_what_train_ship_and_validate_leave_makes_a_page(tmp_path: Path) -> None:
    dataset = labelled(tmp_path / "data", trees=150)
    front = train(dataset, tmp_path / "trained", recipes=["linear"], n_boot=50)
    sheet = ship(tmp_path / "trained", tmp_path / "scorer.onnx")
    assert "pairs" not in sheet["front"][0]
    for figures in (json.loads(json.dumps(front)), json.loads((tmp_path / "scorer.json").read_text())):
        root = parsed(page(figures))
        judged = rows_of(root, "Accuracy on held-out trees")
        name = "this scorer" if "recipe" in figures else "linear"
        assert judged[name][0] == spread(front["scorers"][0]["held_out"]["forgone_percent"])
        titles = [text_in(f.find("h3")) for f in root.findall(".//figure")]
        assert len(titles) == (9 if any_slice_lost(front) else 8)
        for word in ("Values, exact", "upper bound", "size of score", "Stopping", "What pays"):
            assert any(word in title for title in titles)
    assert "slices" in sheet["accuracy"]
    assert all("slices" not in e["held_out"] for e in sheet["front"])
    again = validate(tmp_path / "scorer.onnx", dataset, n_boot=2)
    assert again["pairs"] == front["scorers"][0]["pairs"] == sheet["pairs"]


def test_the_charts_take_nothing_at_all() -> None:
    figure = charts.front([], [], x_label="x", y_label="y")
    assert theme.svg(figure, "empty", "nothing").tag == "svg"
    figure = charts.pairs([], [], 1e-8)
    assert theme.svg(figure, "empty", "nothing").tag == "svg"


def test_the_command_adds_the_shifts_that_validate_left(tmp_path: Path) -> None:
    """`report FRONT --shifts FILE` shows them; a file without any is refused by name."""
    front, left, out = tmp_path / "front.json", tmp_path / "shifts.json", tmp_path / "page.html"
    front.write_text(json.dumps(front_figures()))
    left.write_text(json.dumps({"shifts": shifts()}))
    assert run(["report", str(front), "--out", str(out)]) == 0
    assert "Trees unlike" not in out.read_text()
    assert run(["report", str(front), "--shifts", str(left), "--out", str(out)]) == 0
    assert "dense" in out.read_text()
    assert list(rows_of(parsed(out.read_text()), "Trees unlike those of training")) == list(shifts())
    assert run(["report", str(front), "--shifts", str(front), "--out", str(out)]) == 2
