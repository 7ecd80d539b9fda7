"""What follows from known cells: the best scorer, scorer or closed form, sheets, pictures."""

from __future__ import annotations

import json
import re
import shutil
import xml.etree.ElementTree as ET
from dataclasses import fields, replace
from pathlib import Path

import numpy as np
import pytest
from ladder import CLOSED_FORM

from distill.errors import InputError
from distill.rehearse.against import Against
from distill.rehearse.aimed import FEWEST, TOO_FEW
from distill.rehearse.campaign import Campaign, Results
from distill.rehearse.findings import BEST, NO_SEARCH, places_of
from distill.rehearse.left_out import CHOICE, DECISION, Reason
from distill.rehearse.loop import Budget
from distill.rehearse.rehearsal import Cell
from distill.rehearse.results import summarise
from distill.rehearse.results_tables import (
    every_cell,
    left_out_lines,
    short_table,
    stopping_table,
    time_table,
)
from distill.rehearse.sheets import add_to_sheet, add_to_sheets, figures_of
from distill.report.rehearsal_page import rehearsal_page, rehearsal_pictures, write_pictures

MODELS = Path(__file__).parents[2] / "models"
FAST = str(MODELS / "cold-store-fast.onnx")
TIMED = [Budget(seconds=100 * cost, rollout_seconds=cost) for cost in (20e-6, 100e-6, 1e-3)]
N = 40
NINE = pytest.approx(0.9, rel=CLOSED_FORM)
EVEN = np.arange(N) % 2 == 0
CAMPAIGN = Campaign(
    problems=("tree-3x2^1-noise1", "taxi"),
    budgets=tuple(str(budget) for budget in TIMED),
    policies=(
        "uct", "thompson", "static-rate", "exact-dynamic-rate",
        f"scorer:{FAST}:name=a", f"scorer:{FAST}:name=b", f"scorer:{FAST}:name=a:stop=auto",
    ),
    seeds=N,
    tuning_seeds=10,
)  # fmt: skip


def cell(problem, budget, policy, regret, choosing=0.0, processor=0.01):
    x, zeros = np.zeros(N) + regret, np.zeros(N)
    columns = {"rollouts": zeros + 100, "choosing": zeros + choosing, "choices": zeros + 100}
    columns |= {"processor": zeros + processor, "stopped": zeros, "fallbacks": zeros}
    return Cell(problem, budget, policy, x, regret_by_mean=x, expected_regret=x, **columns)


def results(ours, left_out=()):
    """UCT 2, Thompson 1, closed form 1.1, exact rate 3; scorers a as given at each cost, b always 9."""
    cells = []
    for problem in CAMPAIGN.problems:
        for budget, regret in zip(TIMED, ours, strict=True):
            cells += [
                cell(problem, budget, name, x)
                for name, x in [("uct", 2), ("thompson", 1), ("static_rate", 1.1), ("a", regret), ("b", 9)]
            ]
            cells.append(cell(problem, budget, "exact_dynamic_rate", 3, choosing=1.0))
    tuning = [{"problem": "taxi", "rollouts": 9, "policy": "uct", "chosen": "uct", "processor_seconds": 5.0}]
    kinds = {"tree-3x2^1-noise1": "Gaussian", "taxi": "win/loss"}
    return Results(CAMPAIGN, cells, tuning, list(left_out), kinds)


def test_the_best_scorer_is_chosen_on_the_other_half():
    """a is perfect on even decisions, b on odd ones: whoever chooses by one half loses on the other."""
    a, b = np.where(EVEN, 0.0, 1.0), np.where(EVEN, 1.0, 0.0)
    cells = [cell("taxi", TIMED[0], "a", a), cell("taxi", TIMED[0], "b", b)]
    (here,) = places_of(Results(CAMPAIGN, cells)).values()
    assert here[BEST].measured.tolist() == [1.0] * N
    same = [cell("taxi", TIMED[0], "a", 1), cell("taxi", TIMED[0], "b", 2)]
    (here,) = places_of(Results(CAMPAIGN, same)).values()
    assert here[BEST].measured.tolist() == [1.0] * N


def test_a_cell_has_its_ratio_to_each_group():
    rows = {
        (r["problem"], r["rollout_seconds"], r["policy"]): r for r in summarise(results([4, 0.5, 2]))["rows"]
    }
    found = rows["taxi", TIMED[1].rollout_seconds, BEST]["ratios"]
    assert {g: x["rival"] for g, x in found.items()} == {
        "sampling": "thompson", "static": "static_rate", "exact": "exact_dynamic_rate",
    }  # fmt: skip
    ratios = [found[g][key] for g in ("sampling", "static", "exact") for key in ("low", "ratio", "high")]
    assert ratios == pytest.approx([*[0.5] * 3, *[0.5 / 1.1] * 3, *[0.5 / 3] * 3], rel=CLOSED_FORM)
    assert rows["taxi", TIMED[1].rollout_seconds, "uct"]["ratios"]["sampling"]["ratio"] == 2


def test_scorer_or_closed_form_by_kind_and_cost():
    table = {(r["kind"], r["rollout_seconds"]): r for r in summarise(results([4, 0.5, 1.1]))["by_kind"]}
    assert len(table) == 6
    for kind in ("Gaussian", "win/loss"):
        dear, cheap, same = (table[kind, b.rollout_seconds] for b in (TIMED[1], TIMED[0], TIMED[2]))
        assert (dear["use"], dear["why"]) == ("scorer", "measurably better than the closed form")
        assert (cheap["use"], cheap["why"]) == ("closed form", "the scorer is measurably worse")
        assert (same["use"], same["why"]) == ("closed form", "no measurable difference")
        assert dear["static"]["ratio"] == pytest.approx(0.5 / 1.1, rel=CLOSED_FORM)


def test_where_no_search_pays_none_is_advised():
    """To act at once costs 0.9: less than anyone's regret at one cost, more than the scorer's at another."""
    found = results([4, 0.5, 1.1])
    found.unsearched.append(cell("taxi", Budget(rollouts=0), "even", 0.9))
    summary = summarise(found)
    use = {(a["problem"], a["budget"]): a["use"] for a in summary["advice"]}
    dear, cheap, same = (str(b) for b in (TIMED[1], TIMED[0], TIMED[2]))
    assert use["taxi", dear] == "a"
    assert use["taxi", cheap] == use["taxi", same] == NO_SEARCH
    assert use["tree-3x2^1-noise1", cheap] == "thompson"
    assert summary["unsearched"] == [
        {"problem": "taxi", "measured": NINE, "interval": {"low": NINE, "high": NINE}}
    ]
    assert any("| 0.9 | " in line and f"| {NO_SEARCH} |" in line for line in every_cell(summary))
    assert NO_SEARCH in rehearsal_page(summary)


def test_where_exact_choosing_is_over_the_budget_it_is_counted_apart():
    slow = Reason.slow(CHOICE, 0.099)
    reasons = {"data": slow.as_json(), "words, as before": {"why": slow.why}}
    for told in [*reasons.values(), {**slow.as_json(), "why": "in other words"}]:
        late = {"problem": "taxi", "policy": "exact_dynamic_rate", **told}
        left_out = [{**late, "budget": "10ms@100us"}, {**late, "budget": "32"}]
        aims = summarise(results([4, 0.5, 2], left_out))["aims"][BEST]["exact"]
        assert (aims["cells"], aims["reached"], aims["no_choice"]) == (4, 4, 1)


def test_reasons_of_time_are_told_once_whatever_the_time():
    """Times are data, so words that have one of their own, or a file's name with one, stay as they are."""
    place = {"problem": "taxi", "budget": "32", "policy": "p"}
    other = "a simulator that takes 7 ms a step"
    rows = [
        {**place, **Reason.slow(CHOICE, 0.099).as_json()},
        {**place, "why": "one choice takes 98.1 ms"},  # a folder of before
        {**place, **Reason.slow(DECISION, 0.045).as_json()},
        {**place, **Reason(other).as_json()},
    ]
    summary = summarise(results([4, 0.5, 2], rows))
    assert left_out_lines(summary) == [
        "Left out: p, in 2 of the places: one choice takes too long.",
        "Left out: p, in 1 of the places: choosing takes too long.",
        f"Left out: p, in 1 of the places: {other}.",
    ]
    page = rehearsal_page(summary)
    assert page.count("p: choosing takes too long") == page.count(f"p: {other}") == 1
    assert json.loads(json.dumps(summary))["left_out"][0]["seconds"] == 0.099


def test_tables_say_what_the_summary_does():
    summary = summarise(results([4, 0.5, 1.1]))
    short = "\n".join(short_table(summary))
    assert "| static closed form | 4 | <= 0.95 | 2 (50%) | > 1.05 | 0 | 2 | 0 |" in short
    assert "| Gaussian | 20 us | 1 | 40 | 3.64 [3.64, 3.64] | 4.00 [4.00, 4.00] | closed form |" in short
    assert len(every_cell(summary)) == 2 + 6
    taxi = next(line for line in time_table(summary, 400, 100) if "taxi" in line)
    # 18 cells of 40 decisions at 0.01 s, ten times as many decisions; tuning 5 s, ten times
    assert taxi == f"| taxi | {18 * 400 * 0.01:.0f} | 50 |"
    found = results([4, 0.5, 1.1])  # prices to stop at, tuned in 3 s on as many decisions as a cell has
    found.tuning.append({**found.tuning[0], "spent": {}, "processor_seconds": 3.0})
    taxi = next(line for line in time_table(summarise(found), 400, 100) if "taxi" in line)
    assert taxi == f"| taxi | {18 * 400 * 0.01 + 30:.0f} | 50 |"


def without(file):
    """Take the rehearsal out of a sheet."""
    sheet = json.loads(file.with_suffix(".json").read_text())
    file.with_suffix(".json").write_text(json.dumps({k: v for k, v in sheet.items() if k != "rehearsal"}))


def test_a_rehearsal_with_fewer_cells_does_not_replace_the_one_in_a_sheet(tmp_path):
    for end in ("onnx", "json", "md"):
        shutil.copy(MODELS / f"cold-store-fast.{end}", tmp_path)
    file = tmp_path / "cold-store-fast.onnx"
    sheet = file.with_suffix(".json")
    summary = summarise(results([4, 0.5, 1.1]))
    kept = sheet.read_bytes()
    held = len(json.loads(kept)["rehearsal"]["cells"])
    with pytest.raises(InputError, match=f"rehearsal: holds {held} cells, {held} of which the new"):
        add_to_sheet(summary, file)
    assert sheet.read_bytes() == kept
    without(file)
    add_to_sheet(summary, file)
    kept = sheet.read_bytes()
    add_to_sheet(summary, file)  # the same cells again
    found = results([4, 0.5, 1.1])
    fewer = [c for c in found.cells if c.problem == "taxi"]
    (tmp_path / "summary.json").write_text(json.dumps(summarise(replace(found, cells=fewer))))
    with pytest.raises(InputError, match="holds 12 cells, 6 of which the new rehearsal lacks"):
        add_to_sheets(tmp_path, [file])
    assert sheet.read_bytes() == kept


def test_few_decisions_claim_nothing():
    """39 decisions with half the regret on each: an interval without width, and nothing is said."""

    def told(n):
        found = results([0.5, 0.5, 0.5])
        names = [f.name for f in fields(Cell) if f.name not in ("problem", "budget", "policy")]
        cells = [replace(c, **{name: getattr(c, name)[:n] for name in names}) for c in found.cells]
        stops = [replace(c, policy="a-stops", rollouts=c.rollouts / 2) for c in cells if c.policy == "a"]
        campaign = replace(CAMPAIGN, seeds=n)
        return summarise(replace(found, cells=[*cells, *stops], campaign=campaign))

    few, enough = told(FEWEST - 1), told(FEWEST)
    for rows in (few["by_kind"], few["advice"]):
        assert {row["why"] for row in rows} == {TOO_FEW}
        assert {row["decisions"] for row in rows} == {FEWEST - 1}
    assert {row["use"] for row in few["by_kind"]} == {"closed form"}
    assert {row["use"] for row in enough["by_kind"]} == {"scorer"}
    assert not any(row["free"] for row in few["stopping"])
    assert all(row["free"] for row in enough["stopping"])
    assert few["aims"][BEST]["static"]["better"] == 0 < enough["aims"][BEST]["static"]["better"]
    assert f"39 decisions, {TOO_FEW} (below 40)" in short_table(few)[-1]
    assert "nothing is claimed" in short_table(few)[1]
    assert not any(TOO_FEW in line for line in short_table(enough))


def test_regret_below_the_error_of_its_judge_advises_nothing():
    """The scorer has 0.5, the closed form 1.1; told against rollouts whose error is 2, neither is known."""
    judged = replace(results([0.5, 0.5, 0.5]), against={"taxi": Against(4000, 2.0)})
    summary = summarise(judged)
    told = {row["problem"]: (row["use"], row["why"].split(" ")[0]) for row in summary["advice"]}
    assert told == {"taxi": ("static_rate", "all"), "tree-3x2^1-noise1": ("a", "measurably")}
    assert summary["counted"] == ["tree-3x2^1-noise1"]
    assert summary["aims"][BEST]["static"]["cells"] == 2
    assert {row["problems"] for row in summary["break_even"]} == {1}
    alone = summarise(replace(judged, against={p: Against(4000, 2.0) for p in CAMPAIGN.problems}))
    assert alone["counted"] == list(CAMPAIGN.problems)
    assert alone["aims"][BEST]["static"]["cells"] == 4


def test_where_no_interval_can_be_told_nothing_is_claimed():
    """The closed form errs in one decision of 40: in a third of the resamples in none."""
    found = results([1.0, 1.0, 1.0])
    once = np.where(np.arange(N) == 3, 1.0, 0.0)
    cells = [
        replace(c, regret=once, regret_by_mean=once, expected_regret=once) if c.policy == "static_rate" else c
        for c in found.cells
    ]
    summary = summarise(replace(found, cells=cells))
    (row, *_) = summary["by_kind"]
    assert (row["static"]["ratio"], row["static"]["low"]) == (pytest.approx(40.0, rel=CLOSED_FORM), None)
    assert (row["use"], row["why"]) == ("closed form", TOO_FEW)
    assert any("40.00 [no interval]" in line for line in short_table(summary))
    assert "no interval" in rehearsal_page(summary)


def test_figures_go_into_the_sheets_of_the_files_that_were_rehearsed(tmp_path):
    for name in ("cold-store-fast", "on-time"):
        for end in ("onnx", "json", "md"):
            shutil.copy(MODELS / f"{name}.{end}", tmp_path)
    summary = summarise(results([4, 0.5, 1.1]))
    file = tmp_path / "cold-store-fast.onnx"
    before = json.loads(file.with_suffix(".json").read_text())
    without(file)
    add_to_sheet(summary, file)
    sheet = json.loads(file.with_suffix(".json").read_text())
    found = sheet.pop("rehearsal")
    assert sheet == {k: v for k, v in before.items() if k != "rehearsal"}
    assert found == figures_of(summary, sheet["file"]["sha256"])
    assert {row["policy"] for row in found["cells"]} == {"a", "b"}
    assert found["uses"]["a"]["static"]["reached"] == 2
    page = file.with_suffix(".md").read_text()
    assert "## In rehearsal" in page
    assert "| a | static closed form | 4 | <= 0.95 | 2 | > 1.05 | 0 |" in page
    (tmp_path / "summary.json").write_text(json.dumps(summary))
    other = tmp_path / "on-time.json"
    kept = other.read_bytes(), file.with_suffix(".json").read_bytes()
    with pytest.raises(InputError, match="must hold the scorer of the sheet, by its SHA-256"):
        add_to_sheets(tmp_path, [file, other.with_suffix(".onnx")])
    assert (other.read_bytes(), file.with_suffix(".json").read_bytes()) == kept
    (tmp_path / "summary.json").write_text(json.dumps({k: x for k, x in summary.items() if k != "by_kind"}))
    with pytest.raises(InputError, match="by_kind: is missing"):  # as older versions left it
        add_to_sheets(tmp_path, [file])
    with pytest.raises(InputError, match="must be a folder that rehearse left"):
        add_to_sheets(tmp_path / "none", [file])


def test_what_stopping_saves_is_told_and_drawn():
    """Taxi saves 60 % and loses nothing; the tree 20 %, and more regret in every decision."""
    found = results([1, 1, 1])
    budget = TIMED[1]
    for problem, regret, rollouts in (("taxi", 1.0, 40), ("tree-3x2^1-noise1", 1.5, 80)):
        stops = cell(problem, budget, "a-stops", regret)
        found.cells.append(replace(stops, rollouts=np.zeros(N) + rollouts))
    auto = CAMPAIGN.policies[-1]
    tuned = {
        "rollouts": 100,
        "policy": auto,
        "chosen": auto.replace("auto", "0.01"),
        "processor_seconds": 0.0,
    }
    found.tuning.append({"problem": "taxi", **tuned})
    summary = summarise(found)
    rows = {row["problem"]: row for row in summary["stopping"]}
    assert rows["taxi"]["free"]
    assert rows["taxi"]["saved"] == pytest.approx(0.6, rel=CLOSED_FORM)
    assert rows["taxi"]["price"] == 0.01
    assert (rows["taxi"]["lost"], rows["taxi"]["lost_low"]) == (0, 0)
    assert not rows["tree-3x2^1-noise1"]["free"]
    assert rows["tree-3x2^1-noise1"]["lost_low"] == pytest.approx(0.5, rel=CLOSED_FORM)
    told = "saves at least 30 % of the rollouts, with no measurable loss of regret, on 1 of 2 problems "
    assert short_table(summary)[-1] == f"Stopping early at a budget of {budget} {told}(40 decisions each)."
    assert "| 60 | 1.00 [1.00, 1.00] | 0.01 |" in "".join(stopping_table(summary))
    assert "What stopping early saves" in rehearsal_page(summary)
    drawn = ET.tostring(rehearsal_pictures(summary)["stopping"], encoding="unicode")
    assert drawn.count("fill-opacity: 0") == 1  # hollow
    assert "stopping" not in rehearsal_pictures({**summary, "stopping": []})


def test_pictures_stand_alone_and_show_every_cell(tmp_path):
    summary = summarise(results([4, 0.5, 1.1]))
    names = {path.name for path in write_pictures(summary, tmp_path)}
    assert names == {"ratios.svg", "ratios-closed-form.svg", "costs.svg", "choosing.svg", "break-even.svg"}
    text = (tmp_path / "ratios.svg").read_text()
    assert "prefers-color-scheme:dark" in text
    fewer = {**summary, "rows": [r for r in summary["rows"] if (r["problem"], r["policy"]) != ("taxi", BEST)]}
    less = ET.tostring(rehearsal_pictures(fewer)["ratios"], encoding="unicode")
    assert text.count("<use") > less.count("<use")
    assert ">taxi<" in text
    assert ">taxi<" not in less
    assert "How much of the time goes into choosing" in rehearsal_page(summary)


def test_every_policy_of_a_picture_is_drawn_in_a_way_of_its_own():
    """UCT and Thompson sampling have colours of their own; dashes tell apart who shares one."""
    found = results([4, 0.5, 1.1])
    for budget in TIMED:
        for problem in CAMPAIGN.problems:
            found.cells.extend(
                cell(problem, budget, name, x) for name, x in (("top_two", 5), ("static_voc", 6))
            )
    names = ("uct", "thompson", "top-two", "static-voc", *CAMPAIGN.policies[2:])
    found = replace(found, campaign=replace(CAMPAIGN, policies=names))
    summary = summarise(found)
    for name, n in (("costs", 6), ("break-even", 7)):
        drawn = ET.tostring(rehearsal_pictures(summary)[name], encoding="unicode")
        policies = re.findall(r'<path [^>]*style="([^"]*stroke-width: 1.4[^"]*)"', drawn)
        lines = {(re.findall(r"var\(--(\w+)\)", style)[0], "dasharray" in style) for style in policies}
        assert len(lines) == n
        assert {colour for colour, _ in lines} == {"uct", "peer", "ink", "exact", "scorer"}
        marks = re.findall(r'<use [^>]*style="fill: var\(--(\w+)\)[^>]*href="([^"]*)"', drawn)
        assert len({mark for colour, mark in marks if colour != "line"}) == n


def test_a_scorer_called_like_a_rule_is_not_drawn_as_one():
    summary = summarise(results([4, 0.5, 1.1]))
    renamed = json.loads(json.dumps(summary).replace('"b"', '"uct-like"'))
    for name in ("costs", "choosing", "break-even"):
        drawn, again = (ET.tostring(rehearsal_pictures(s)[name]) for s in (summary, renamed))
        assert drawn == again
