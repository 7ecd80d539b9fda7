"""Which figures go into which picture; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterable, Iterator, Mapping

from distill.report import charts
from distill.report.charts import Peer, Point, Row
from distill.report.elements import Child, element, number, stated, text_of
from distill.report.facts import SHARES, Facts, Figures, ends, known, plain, time_of
from distill.report.more_pictures import break_even_picture, parts_pictures, shifts_picture
from distill.report.theme import svg
from distill.report.words import CAPTIONS, SHARE_NAMES

__all__ = ["front_picture", "pictures"]


def pictures(facts: Facts) -> Iterator[ET.Element]:
    """The pictures with title and caption, in reading order."""
    ring = f" {CAPTIONS['ring']}" if facts.sheet is not None else ""
    yield _framed("Loss against decision time", front_picture(facts), CAPTIONS["front"] + ring)
    loss = _loss_picture(facts.judged, [one.name for one in facts.shown], "loss")
    part = f" {CAPTIONS['part']}" if facts.partly_judged else ""
    yield _framed("What picks lose", loss, CAPTIONS["loss"] + part)
    yield _framed(f"One decision over {facts.leaves} leaves", _time_picture(facts), CAPTIONS["time"])
    # Of a front, the ends: its fastest and its most accurate.
    by_time = sorted(facts.shown, key=lambda one: time_of(one.latency))
    for i, one in enumerate(by_time[:1] + by_time[1:][-1:]):
        if one.pairs is not None:
            yield _pairs_framed(one.name, one.pairs, f"pairs-{i}")
    if (best := facts.most_accurate) is not None:
        for title, picture, caption in parts_pictures(best.name, best.accuracy):
            yield _framed(title, picture, *caption)
    if facts.shifts:
        title, picture, caption = shifts_picture(facts.shifts)
        yield _framed(title, picture, *caption)
    if found := facts.break_even:
        roles = dict.fromkeys(found["gain_percent"], "scorer")
        roles |= dict.fromkeys(facts.peers, "peer")
        roles |= {f"exact {name}": "exact" for name in facts.exact}
        title, picture, caption = break_even_picture(
            found, roles, None if facts.sheet is None else facts.sheet["recipe"]
        )
        yield _framed(title, picture, *caption)
    if traces := facts.summary.get("on traces"):
        scorers = [name for name in traces if name not in facts.beside]
        picture = _loss_picture(traces, scorers, "traces")
        yield _framed("What picks lose on recorded trees", picture, CAPTIONS["traces"])


def front_picture(facts: Facts, *, width: float = charts.WIDTH, height: float = 380) -> ET.Element:
    """The front: forgone share against median decision time, log-log."""
    chosen = facts.sheet["recipe"] if facts.sheet is not None else None
    points = [
        Point(
            e["recipe"],
            time_of(e["latency"]),
            *ends(e["held_out"]["forgone_percent"]),
            joined=e["on_front"],
            chosen=e["recipe"] == chosen,
        )
        for e in facts.scorers
    ]
    peers = [
        Peer(name, loss, time_of(timed["latency"]) if "latency" in timed else None)
        for name, m in facts.without_scorer.items()
        if (loss := plain(m["forgone_percent"]["value"])) is not None
        for timed in (facts.peers.get(name, m),)
    ]
    figure = charts.front(
        points,
        peers,
        x_label=f"median time of a decision over {facts.leaves} leaves, µs",
        y_label="forgone share, %",
        width=width,
        height=height,
    )
    return svg(
        figure, "front", f"Forgone share against decision time of {len(points)} scorers, as in the tables"
    )


def _loss_picture(rows: Mapping[str, Figures], scorers: Iterable[str], name: str) -> ET.Element:
    chosen = set(scorers)
    panels = {
        f"{SHARE_NAMES[key]}, %": [
            Row(row, *ends(m[key]), text=stated(m[key]), role="scorer" if row in chosen else "peer")
            for row, m in rows.items()
        ]
        for key in SHARES
    }
    return svg(
        charts.rows(panels, most=100.0), name, f"Both shares forgone by {', '.join(rows)}, as in the tables"
    )


def _time_picture(facts: Facts) -> ET.Element:
    timed = {one.name: (one.latency, "scorer") for one in facts.shown}
    timed |= {f"backup {name}": (t, "scorer") for name, t in facts.backup.items()}
    timed |= {name: (m["latency"], "peer") for name, m in facts.peers.items() if "latency" in m}
    timed |= {f"exact {name}": (t, "exact") for name, t in facts.exact.items()}
    rows = []
    for name, (t, role) in timed.items():
        p50, p99 = time_of(t), time_of(t, "p99_us")
        rows.append(Row(name, p50, p50, p99, text=f"{text_of(p50)} ({text_of(p99)})", role=role))
    figure = charts.rows({"median time, µs (99 of 100)": rows})
    return svg(figure, "time", f"Median decision time of {', '.join(timed)}, as in the table")


def _pairs_framed(name: str, pairs: Figures, id_: str) -> ET.Element:
    figure = charts.pairs(
        [known(v) for v in pairs["exact"]], [known(v) for v in pairs["predicted"]], known(pairs["least"])
    )
    caption: list[Child] = [
        CAPTIONS["pairs"], " ", number(len(pairs["exact"])), " drawn at random from the ",
        number(pairs["candidates"]), " candidates of ", number(pairs["trees"]),
        " trees where one of both values reaches ", number(pairs["least"]),
        "; a value below that stands on the edge. Below it in both, and left out: ",
        number(pairs["smaller"]), ".",
    ]  # fmt: skip
    return _framed(
        f"Values, exact and by {name}", svg(figure, id_, f"Exact values against those of {name}"), *caption
    )


def _framed(title: str, picture: ET.Element, *caption: Child) -> ET.Element:
    return element("figure", element("h3", title), picture, element("figcaption", *caption))
