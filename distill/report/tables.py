"""The tables of the page, and its list of origins; floor 7."""

from __future__ import annotations

import xml.etree.ElementTree as ET
from collections.abc import Iterator, Mapping, Sequence
from typing import Final

from distill.report.elements import Child, element, estimate, number, section, table, word_list
from distill.report.facts import SHARES, Facts, Figures
from distill.report.words import CAPTIONS, COLUMNS

__all__ = ["origin", "tables"]


def tables(facts: Facts) -> Iterator[ET.Element]:
    """A section for each table, in reading order."""
    yield section(
        "Accuracy on held-out trees", *_accuracy(facts.judged, facts.partly_judged), *_left_out(facts)
    )
    backup = [element("p", CAPTIONS["backup"], class_="note")] if facts.backup else []
    yield section(f"Time of one decision over {facts.leaves} leaves", _times(facts), *backup)
    yield section("The scorers that were trained", _scorers(facts))
    if (best := facts.most_accurate) is not None and (slices := best.accuracy.get("slices")):
        yield section(f"By slice of trees, {best.name}", _slices(slices))
    if facts.shifts:
        yield section("Trees unlike those of training", _shifts(facts.shifts), _shift_words(facts.shifts))
    if traces := facts.summary.get("on traces"):
        yield section("Accuracy on recorded trees", *_accuracy(traces))
    if tree := facts.summary.get("one tree"):
        yield section("One tree, exactly and by scorer", element("p", CAPTIONS["tree"]), _one_tree(tree))


def _accuracy(rows: Mapping[str, Figures], part: Mapping[str, str] | None = None) -> list[ET.Element]:
    """part : rows that were measured on a part of the trees, and on which."""
    columns = [key for key in COLUMNS if any(key in m for m in rows.values())]
    body = {name: [estimate(m.get(key)) for key in columns] for name, m in rows.items()}
    out = [table([COLUMNS[key] for key in columns], body, part)]
    measured = next((m for m in rows.values() if "interval_level" in m), None)
    if measured is None:
        return out
    note: list[Child] = [
        f"Below a figure, its {100 * measured['interval_level']:g} % bootstrap interval over ",
        number(measured["trees"]), " trees. Left out of both shares, because their best value is 0: ",
        number(measured["trees_with_best_zero"]), ".",
    ]  # fmt: skip
    return [*out, element("p", *note, class_="note")]


def _left_out(facts: Facts) -> list[ET.Element]:
    """Which peers are not defined for these trees, and why."""
    why: dict[str, list[str]] = {}
    for name, reason in facts.peers_left_out.items():
        why.setdefault(reason, []).append(name)
    texts = (f"Not measured: {', '.join(names)} ({reason})." for reason, names in why.items())
    return [element("p", text, class_="note") for text in texts]


def _times(facts: Facts) -> ET.Element:
    faster = facts.sheet["decision"]["times_faster"] if facts.sheet is not None else {}
    timed = [(one.name, one.latency, None) for one in facts.shown]
    timed += [(f"backup {name}", t, None) for name, t in facts.backup.items()]
    timed += [(name, m["latency"], None) for name, m in facts.peers.items() if "latency" in m]
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


def _slices(slices: Sequence[Figures]) -> ET.Element:
    rows = {
        f"{s['by']}: {s['slice']}": [
            number(s["trees"]),
            number(s["candidates"]),
            *(estimate(s[key]) for key in SHARES),
            number(s["covered_percent"]),
        ]
        for s in slices
    }
    return table(("trees", "candidates", *(COLUMNS[key] for key in SHARES), "bound holds, %"), rows)


_SHIFT_COLUMNS: Final = {
    "trees": "trees",
    **{key: COLUMNS[key] for key in SHARES},
    "first_order_forgone_percent": "first-order form's forgone share, %",
    "covered_percent": "bound holds, %",
    "flagged_trees_percent": "trees flagged, %",
    "loss_flagged_percent": "loss flagged, %",
}


def _shifts(shifts: Mapping[str, Figures]) -> ET.Element:
    rows = {name: [estimate(m.get(key)) for key in _SHIFT_COLUMNS] for name, m in shifts.items()}
    return table(list(_SHIFT_COLUMNS.values()), rows)


def _shift_words(shifts: Mapping[str, Figures]) -> ET.Element:
    told: list[tuple[str, list[Child]]] = [(name, [m["changed"]]) for name, m in shifts.items()]
    return element("div", element("p", CAPTIONS["flagged"], class_="note"), word_list(told))


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
