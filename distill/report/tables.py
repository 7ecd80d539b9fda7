"""The tables of the page, and its list of origins; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping

from distill.report.elements import Child, element, estimate, number, section, table
from distill.report.facts import SHARES, Facts, Figures
from distill.report.words import CAPTIONS, COLUMNS

__all__ = ["origin", "tables"]


def tables(facts: Facts) -> Iterator[ET.Element]:
    """A section for each table, in reading order."""
    yield section("Accuracy on held-out trees", *_accuracy(facts.judged))
    yield section(f"Time of one decision over {facts.leaves} leaves", _times(facts))
    yield section("The scorers that were trained", _scorers(facts))
    if traces := facts.summary.get("on traces"):
        yield section("Accuracy on recorded trees", *_accuracy(traces))
    if tree := facts.summary.get("one tree"):
        yield section("One tree, exactly and by scorer", element("p", CAPTIONS["tree"]), _one_tree(tree))


def _accuracy(rows: Mapping[str, Figures]) -> list[ET.Element]:
    columns = [key for key in COLUMNS if any(key in m for m in rows.values())]
    body = {name: [estimate(m.get(key)) for key in columns] for name, m in rows.items()}
    out = [table([COLUMNS[key] for key in columns], body)]
    measured = next((m for m in rows.values() if "interval_level" in m), None)
    if measured is None:
        return out
    note: list[Child] = [
        f"Below a figure, its {100 * measured['interval_level']:g} % bootstrap interval over ",
        number(measured["trees"]), " trees. Left out of both shares, because their best value is 0: ",
        number(measured["trees_with_best_zero"]), ".",
    ]  # fmt: skip
    return [*out, element("p", *note, class_="note")]


def _times(facts: Facts) -> ET.Element:
    faster = facts.sheet["decision"]["times_faster"] if facts.sheet is not None else {}
    timed = [(one.name, one.latency, None) for one in facts.shown]
    timed += [(f"exact {name}", t, faster.get(name)) for name, t in facts.exact.items()]
    header = [
        "median, µs",
        "99 of 100, µs",
        "decisions timed",
        *(["times this scorer's median"] if faster else []),
    ]
    return table(
        header,
        {
            name: [number(x) for x in (t["p50_us"], t["p99_us"], t["calls"], times)][: len(header)]
            for name, t, times in timed
        },
    )


def _scorers(facts: Facts) -> ET.Element:
    rows, marks = {}, {}
    for e in facts.scorers:
        name = e["recipe"]
        shipped = facts.sheet is not None and name == facts.sheet["recipe"]
        marks[name] = ", ".join(["on the front"] * e["on_front"] + ["this scorer"] * shipped)
        rows[name] = [
            *(estimate(e["held_out"][key]) for key in SHARES),
            *(number(e["latency"][key]) for key in ("p50_us", "p99_us")),
            number(e["bytes"]),
            number(e["fit_seconds"]),
        ]
    header = (*(COLUMNS[key] for key in SHARES), "median, µs", "99 of 100, µs", "file, bytes", "training, s")
    return table(header, rows, marks)


def _one_tree(tree: Figures) -> ET.Element:
    marks = {}
    for i in range(len(tree["exact"])):
        who = [
            text for text, key in (("exact", "exact_pick"), ("the scorer", "scorer_pick")) if tree[key] == i
        ]
        marks[f"leaf {i}"] = f"picked by {' and '.join(who)}" if who else ""
    values = zip(tree["exact"], tree["scorer"], strict=True)
    rows = {f"leaf {i}": [number(x), number(y)] for i, (x, y) in enumerate(values)}
    return table(("exact rate", "scorer's rate"), rows, marks)


def origin(facts: Facts) -> Iterator[tuple[str, list[Child]]]:
    """Where the figures come from, as terms and texts."""
    for name, value in facts.data.items():
        texts: list[Child] = [number(value)] if isinstance(value, int) else [str(value)]
        yield name.replace("_", " "), texts
    for name, part in facts.parts.items():
        counts: list[Child] = [number(part["trees"]), " trees, ", number(part["candidates"]), " candidates"]
        yield f"part {name.replace('_', ' ')}", counts
    yield "seed of split and learners", [number(facts.seed)]
    yield "made with", [", ".join(f"{name} {version}" for name, version in facts.made_with.items())]
    yield "features", [", ".join(facts.features)]
    if facts.sheet is not None:
        file = facts.sheet["file"]
        yield "scorer file", [f"{file['name']}, ", number(file["bytes"]), f" bytes, SHA-256 {file['sha256']}"]
