"""A rehearsal from names: tuned, resumed, summed up, shown."""

from __future__ import annotations

import json
import re
import shutil
import xml.etree.ElementTree as ET
from dataclasses import replace
from pathlib import Path

import duckdb
import numpy as np
import pyarrow.parquet as pq
import pytest
from ladder import CLOSED_FORM

from distill.cli import run as command_line
from distill.errors import InputError
from distill.rehearse.campaign import Campaign, Results, run
from distill.rehearse.catalogue import make_problem
from distill.rehearse.findings import BEST, GROUPS
from distill.rehearse.loop import Budget
from distill.rehearse.plans import plan, quick
from distill.rehearse.policy_specs import make_policy
from distill.rehearse.rehearsal import Cell, rehearse
from distill.rehearse.results import summarise, write_results
from distill.rehearse.results_tables import cells_table, short_table
from distill.rehearse.tuning import TUNED, name_of
from distill.report.rehearsal_page import rehearsal_page, rehearsal_pictures

FAST = str(Path(__file__).parents[2] / "models" / "cold-store-fast.onnx")
SMALL = Campaign(
    problems=("tree-3x2^1-noise1", "tree-2x2^1-winloss"),
    budgets=("12", "2ms@100us"),
    policies=("uct", "thompson", "static-rate", f"scorer:{FAST}", f"scorer:{FAST}:stop=auto"),
    seeds=12,
    tuning_seeds=6,
)


@pytest.fixture(scope="module")
def small(tmp_path_factory):
    folder = tmp_path_factory.mktemp("rehearsal")
    results = run(SMALL, folder)
    return folder, results, write_results(results, folder)


def test_every_policy_is_there_or_its_absence_has_a_reason(small):
    _, results, summary = small
    rows = [row for row in summary["rows"] if row["policy"] != BEST]
    found = {(row["problem"], row["budget"], row["policy"]) for row in rows}
    missing = {(x["problem"], x["budget"], x["policy"]) for x in summary["left_out"]}
    budgets = [str(Budget.parse(b)) for b in SMALL.budgets]
    wanted = {(p, b, name_of(s)) for p in SMALL.problems for b in budgets for s in SMALL.policies}
    assert found | missing == wanted
    assert not found & missing
    assert {x["why"] for x in results.left_out} == {"the scorer does not take such trees"}
    assert {x["problem"] for x in results.left_out} == {"tree-2x2^1-winloss"}


def test_what_the_look_ahead_alone_decides_is_told(small):
    folder, _, summary = small
    assert [row["problem"] for row in summary["unsearched"]] == list(SMALL.problems)
    for row in summary["unsearched"]:
        searched = min(r["measured"] for r in summary["rows"] if r["problem"] == row["problem"])
        assert row["measured"] > searched > 0
    assert len(list(folder.glob("unsearched/*.parquet"))) == len(SMALL.problems)


def test_baselines_are_tuned_on_decisions_of_their_own(small):
    folder, results, _ = small
    for row in results.tuning:
        tried = row["regret"]
        if row["policy"] in TUNED:
            assert set(tried) == set(TUNED[row["policy"]])
            assert tried[row["chosen"]] == min(tried.values())
    assert {row["policy"] for row in results.tuning} >= {"uct", "thompson"}
    seeds = duckdb.sql(f"select min(seed) a, max(seed) b from '{folder}/tuning/*.parquet'").fetchall()
    assert seeds == [(1_000_000, 1_000_005)]
    assert duckdb.sql(f"select max(seed) from '{folder}/cells/*.parquet'").fetchall() == [(10_011,)]


def test_a_killed_campaign_goes_on_to_the_same_regrets(small):
    folder, results, _ = small
    for lost in sorted((folder / "cells").glob("*.parquet"))[::3]:
        lost.unlink()
    again = run(SMALL, folder)
    for a, b in zip(results.cells, again.cells, strict=True):
        assert (a.problem, a.budget, a.policy) == (b.problem, b.budget, b.policy)
        if a.budget.seconds is None:  # regret at equal time depends on the time that choosing took
            assert np.array_equal(a.regret, b.regret)
    with pytest.raises(InputError, match=r"campaign\.json: must hold .*to be continued"):
        run(replace(SMALL, tuning_seeds=7), folder)
    with pytest.raises(
        InputError, match=r"campaign\.json: holds 12 decisions a cell; ask for as many or more"
    ):
        run(replace(SMALL, seeds=11), folder)


def test_figures_are_readable_by_others(small):
    folder, _, summary = small
    rows = duckdb.sql(f"select policy, measured from '{folder}/cells.parquet' order by all").fetchall()
    assert rows == sorted((row["policy"], row["measured"]) for row in summary["rows"])
    assert json.loads((folder / "summary.json").read_text()) == summary


def test_columns_of_the_cells_tell_their_units(small):
    """Every column that is written is described, and every description is of one that is written."""
    folder, _, summary = small
    found = pq.read_schema(folder / "cells.parquet")
    told = {name: found.field(name).metadata[b"description"].decode() for name in found.names}
    assert json.loads(found.metadata[b"columns"]) == told
    units = {"regret": "u;", "choosing_us": "us;", "rollout_seconds": "s;", "static_ratio": "1;"}
    assert all(told[name].startswith(unit) for name, unit in units.items())
    flat = {name for row in summary["rows"] for name in row} - {"interval", "ratios"}
    groups = {f"{group}_{key}" for row in summary["rows"] for group, x in row["ratios"].items() for key in x}
    assert flat | groups | {"low", "high"} <= set(found.names)
    assert flat | {"low", "high"} == {name for name in found.names if not name.startswith(tuple(GROUPS))}
    empty = write_results(Results(SMALL), folder / "none")  # types are known where there are no rows
    assert empty["rows"] == []
    assert pq.read_schema(folder / "none" / "cells.parquet").equals(found, check_metadata=True)


def test_the_page_holds_every_cell_and_asks_for_nothing(small):
    _, _, summary = small
    page = rehearsal_page(summary)
    tree = ET.fromstring(page.removeprefix("<!DOCTYPE html>\n"))
    shown = {node.get("value") for node in tree.iter("data")}
    assert {repr(row["measured"]) for row in summary["rows"]} <= shown
    assert not re.search("https?:", page)
    assert page == rehearsal_page(summary)
    with pytest.raises(InputError, match="report: rows: is missing"):
        rehearsal_page({k: v for k, v in summary.items() if k != "rows"})
    with pytest.raises(InputError, match="report: format"):
        rehearsal_page({})


def test_records_are_left_to_trees_that_no_leaf_table_holds(tmp_path):
    records = FAST.replace("cold-store-fast", "crossing-traffic")
    campaign = Campaign(
        problems=("tree-2x2^1-noise1", "tree-2x2^2-noise1-chance"),
        budgets=("3",),
        policies=("thompson", f"scorer:{FAST}", f"scorer:{records}"),
        seeds=2,
        tuning_seeds=0,
    )
    results = run(campaign, tmp_path)
    played = {(c.problem, c.policy) for c in results.cells} - {(p, "thompson") for p in campaign.problems}
    assert played == {
        ("tree-2x2^1-noise1", "cold-store-fast"),
        ("tree-2x2^2-noise1-chance", "crossing-traffic"),
    }
    assert [x["why"].split(",")[0] for x in results.left_out] == [
        "reads records",
        "the scorer does not take such trees",
    ]
    assert results.kinds["tree-2x2^2-noise1-chance"] == "Gaussian, chance nodes"


def test_where_every_policy_is_left_out_all_is_told_nevertheless(tmp_path, capsys):
    """A microsecond is no time to choose in, for a policy that was tuned before."""
    flags = ["--problem", "tree-2x2^1-noise1", "--budget", "0.001ms@1us", "--policy", "uct", "--seeds", "2"]
    assert command_line(["rehearse", *flags, "--tuning-seeds", "2", "--out", str(tmp_path)]) == 0
    summary = json.loads((tmp_path / "summary.json").read_text())
    assert (summary["rows"], len(summary["left_out"])) == ([], 1)
    assert summary["processor_seconds"]["tree-2x2^1-noise1"]["cells"] > 0  # of deciding before a search
    assert "0 cells of 2 decisions" in capsys.readouterr().out
    assert "one choice takes" in json.dumps(summary["left_out"])


def test_dear_exact_choosing_is_left_to_wide_problems_and_that_is_kept(tmp_path):
    names = "tree-2x2^1-noise1", "tree-3x2^1-noise1"
    campaign = Campaign(
        problems=names, budgets=("1ms@100us",), policies=("thompson", "exact-dynamic-rate"),
        seeds=2, tuning_seeds=0, wide=names[:1], dearest=1e-9,
    )  # fmt: skip
    results = run(campaign, tmp_path)
    assert {c.problem for c in results.cells if c.policy == "exact_dynamic_rate"} == {names[0]}
    (found,) = results.left_out
    assert found["why"].startswith("choosing takes")
    assert found["seconds"] > 0
    assert run(replace(campaign, dearest=9.0), tmp_path).left_out == [found]  # decided once
    (place,) = tmp_path.glob("places/tree-3x2*.json")
    before = {"thompson": None, "exact-dynamic-rate": "choosing takes 7 ms a decision"}
    place.write_text(json.dumps(before))  # as earlier versions left it: words alone
    (read,) = run(replace(campaign, dearest=9.0), tmp_path).left_out
    assert (read["why"], read["too_slow"], read["seconds"]) == (
        before["exact-dynamic-rate"],
        "decision",
        None,
    )


# --- what follows from the cells: from figures that are known ---------------------------------------

TIMED = [Budget(seconds=100 * cost, rollout_seconds=cost) for cost in (20e-6, 100e-6, 1e-3)]


def cell(policy, regret, budget, rollouts=100.0, choosing=0.0):
    x, zeros = np.full(40, float(regret)), np.zeros(40)
    columns = {"rollouts": zeros + rollouts, "choosing": zeros + choosing, "choices": zeros + rollouts}
    return Cell(
        "p", budget, policy, x, regret_by_mean=x, expected_regret=x, stopped=zeros, fallbacks=zeros, **columns
    )


def known(scorer, exact_choosing=0.0):
    """Thompson 1, UCT 2, static 1.1, exact 1.2 at every cost; the scorer as given; and one that stops."""
    policies = ("uct", "thompson", "static-rate", "exact-dynamic-rate", f"scorer:{FAST}:name=s")
    stops = f"scorer:{FAST}:name=s:stop=0.01"
    campaign = replace(SMALL, policies=(*policies, stops))
    cells = []
    for budget, regret in zip(TIMED, scorer, strict=True):
        cells += [cell("uct", 2, budget), cell("thompson", 1, budget), cell("static_rate", 1.1, budget)]
        cells += [cell("exact_dynamic_rate", 1.2, budget, choosing=exact_choosing), cell("s", regret, budget)]
    return summarise(Results(campaign, cells))


def test_aims_count_cells_of_dear_rollouts_only():
    aims = known([5.0, 0.8, 1.15])["aims"]["s"]
    sure = {"better": 1, "worse": 1}  # the same regret on every decision: intervals have no width
    assert (
        aims["sampling"]
        == {"cells": 2, "reached": 1, "beyond": 1, "at_most": 0.85, "never_above": 1.1} | sure
    )
    assert (
        aims["static"] == {"cells": 2, "reached": 1, "beyond": 0, "at_most": 0.95, "never_above": 1.05} | sure
    )
    assert "exact" not in aims  # it chooses in no time here
    assert known([5.0, 0.8, 1.15])["aims"][BEST] == aims  # there is but one
    slow = known([5.0, 0.8, 1.15], exact_choosing=1.0)["aims"]["s"]["exact"]
    assert (slow["cells"], slow["reached"]) == (2, 2)


def test_the_closed_form_is_advised_unless_measurably_beaten():
    advice = known([5.0, 0.8, 1.15])["advice"]
    assert [a["use"] for a in advice] == ["thompson", "s", "thompson"]
    assert [a["best_other"] for a in advice] == ["thompson", "s", "thompson"]
    summary = known([5.0, 1.2, 1.15])
    assert all(a["ratio"] == pytest.approx(1 / 1.1, rel=CLOSED_FORM) for a in summary["advice"])


def test_break_even_rows_are_ratios_to_the_best_sampling():
    rows = [r for r in known([5.0, 0.8, 1.15])["break_even"] if r["policy"] == "s"]
    assert [r["rollout_seconds"] for r in rows] == [20e-6, 100e-6, 1e-3]
    assert [r["ratio"] for r in rows] == pytest.approx([5.0, 0.8, 1.15], rel=CLOSED_FORM)
    picture = rehearsal_pictures(known([5.0, 0.8, 1.15]))["break-even"]
    assert "cost of a rollout, µs (time: 100 rollouts)" in "".join(picture.itertext())


def test_stopping_is_held_against_going_on():
    campaign = replace(SMALL, policies=("thompson", f"scorer:{FAST}", f"scorer:{FAST}:stop=0.01"))
    names = [name_of(spec) for spec in campaign.policies]
    cells = [cell("thompson", 1, TIMED[1]), cell(names[1], 1, TIMED[1]), cell(names[2], 1.02, TIMED[1], 60)]
    (found,) = summarise(Results(campaign, cells))["stopping"]
    assert found["saved"] == pytest.approx(0.4, rel=CLOSED_FORM)
    assert found["ratio"] == pytest.approx(1.02, rel=CLOSED_FORM)


def test_tables_show_every_cell():
    summary = known([5.0, 0.8, 1.15])
    lines = cells_table(summary)
    assert len(lines) == 2 + len(TIMED)
    assert "0.80 [0.80, 0.80] (thompson)" in lines[3]
    assert any("| 2 | <= 0.85 | 1 (50%) | > 1.1 | 1 |" in line for line in short_table(summary))


# --- where rollouts are plenty ---------------------------------------------------------------------

USE = f"scorer:{FAST.replace('cold-store-fast', 'crossing-traffic')}:late=0.5"
PLENTY = replace(
    SMALL,
    problems=(
        "tree-2x2^2-noise1-chance",
    ),  # regret itself counts there, 0 in most decisions of so many rollouts
    policies=("thompson",),
    stops=(USE, f"{USE}:stop=auto"),
    plenty=("150", "400"),
    slowest=1e-9,
    seeds=20,
)


@pytest.fixture(scope="module")
def plenty(tmp_path_factory):
    folder = tmp_path_factory.mktemp("plenty")
    return folder, write_results(run(PLENTY, folder), folder)


def test_stops_play_where_rollouts_are_plenty_and_nothing_else_does(plenty):
    folder, summary = plenty
    played = {
        budget: {r["policy"] for r in summary["rows"] if r["budget"] == budget} for budget in ("12", "400")
    }
    assert played["400"] == {name_of(spec) for spec in PLENTY.stops}  # whatever `slowest` says
    assert played["12"] <= {"thompson"}
    assert [row["budget"] for row in summary["stopping"]] == ["150", "400"]
    table = (folder / "stopping.md").read_text().splitlines()
    assert len(table) == 4
    assert table[-1].startswith(
        "| tree-2x2^2-noise1-chance | Gaussian, chance nodes | 400 | crossing-traffic-late0.5-stops |"
    )
    assert (
        sum("Stopping early at a budget of" in x for x in (folder / "table.md").read_text().splitlines()) == 2
    )


def test_the_price_is_the_highest_that_cost_nothing_in_tuning(plenty):
    _, summary = plenty
    rows = [row for row in summary["tuning"] if row["policy"].endswith(":stop=auto")]
    assert [row["rollouts"] for row in rows] == [150, 400]
    for row, found in zip(rows, summary["stopping"], strict=True):
        regret, spent = row["regret"], row["spent"]
        assert list(regret)[-1] == USE
        assert spent[USE] == row["rollouts"]
        assert list(spent.values()) == sorted(spent.values())  # a lower price never stops earlier
        assert regret[row["chosen"]] <= 1.01 * regret[USE]
        assert float(row["chosen"].partition(":stop=")[2]) == found["price"]
        assert found["saved"] > 0.1


def test_cells_with_and_without_stopping_are_those_of_searches_of_their_own(plenty, tmp_path):
    """Both come from one search; played apart, decision by decision, they are the same."""
    folder, summary = plenty
    price = summary["stopping"][-1]["price"]
    policies = [make_policy(USE), make_policy(f"{USE}:stop={price}")]
    problem, budget = make_problem(PLENTY.problems[0]), Budget(rollouts=400)
    apart = rehearse([problem], policies, [budget], tmp_path, seeds=PLENTY.seeds, first_seed=10_000)
    together = [c for c in run(PLENTY, folder).cells if c.budget == budget]
    assert [c.policy for c in together] == [name_of(spec) for spec in PLENTY.stops]
    assert together[1].rollouts.sum() < together[0].rollouts.sum()
    for a, b in zip(apart, together, strict=True):
        for column in ("regret", "regret_by_mean", "expected_regret", "rollouts", "stopped", "fallbacks"):
            assert np.array_equal(getattr(a, column), getattr(b, column), equal_nan=True)


def test_tuned_prices_are_read_when_a_run_goes_on(plenty, tmp_path, monkeypatch):
    folder, before = tmp_path / "copy", plenty[1]
    shutil.copytree(plenty[0], folder)
    monkeypatch.setattr("distill.rehearse.tuning.decide_at_prices", None)
    again = run(PLENTY, folder)
    assert json.loads(json.dumps(again.tuning)) == before["tuning"]
    (kept,) = folder.glob("tuning/stops--*-400-*.json")
    kept.write_text("{")
    with pytest.raises(InputError, match="must be valid JSON"):
        run(PLENTY, folder)


def test_more_seeds_leave_tuned_constants_as_they_were(plenty, tmp_path, monkeypatch):
    """As in one run with all the seeds whose prices were tuned on as many decisions as here; older folders
    do not say on how many, and it was half of their seeds.
    """
    folder, before = tmp_path / "raised", plenty[1]
    shutil.copytree(plenty[0], folder)
    about = json.loads((folder / "campaign.json").read_text())
    assert about.pop("stop_seeds") == PLENTY.seeds // 2
    (folder / "campaign.json").write_text(json.dumps(about))
    next(
        folder.glob("cells/*-stops--*.parquet")
    ).unlink()  # one of two cells that one search gives: both anew
    more = replace(PLENTY, seeds=26)
    told = []
    with monkeypatch.context() as patched:
        patched.setattr("distill.rehearse.tuning.decide_at_prices", None)  # nothing is tuned anew
        raised = run(more, folder, progress=lambda done, of: told.append((done, of)))
    assert (told[0], told[-1]) == ((0, told[0][1]), (told[0][1], told[0][1]))
    assert json.loads(json.dumps(raised.tuning)) == before["tuning"]
    assert json.loads((folder / "campaign.json").read_text())["stop_seeds"] == PLENTY.seeds // 2
    whole = run(replace(more, stop_seeds=PLENTY.seeds // 2), tmp_path / "whole")
    names = [cell.policy for cell in whole.cells]
    assert any(name.endswith("-stops") for name in names)
    assert names == [cell.policy for cell in raised.cells]
    for a, b in zip([*raised.cells, *raised.unsearched], [*whole.cells, *whole.unsearched], strict=True):
        assert len(a) == 26
        if a.budget.seconds is None:
            for column in ("regret", "expected_regret", "rollouts", "stopped", "choices", "fallbacks"):
                assert np.array_equal(getattr(a, column), getattr(b, column), equal_nan=True)
    with pytest.raises(InputError, match="prices to stop at that were tuned on 10 decisions"):
        run(replace(more, stop_seeds=13), folder)


def test_prices_are_tuned_on_half_of_the_seeds_of_whoever_asks_first(tmp_path):
    """Nothing was tuned on few decisions, so the many that come with the first price count."""
    small = {"problems": PLENTY.problems, "budgets": ("6",), "plenty": (), "stops": ()}
    run(replace(PLENTY, **small, seeds=4), tmp_path)
    more = replace(PLENTY, **small, seeds=12, policies=(*PLENTY.policies, f"{USE}:stop=auto"))
    assert run(more, tmp_path).campaign.stop_seeds == 6


def test_a_budget_is_plenty_or_not():
    with pytest.raises(InputError, match="plenty: must be other budgets than the policies'; got '12'"):
        replace(PLENTY, plenty=("12",))


# --- the command -----------------------------------------------------------------------------------


def test_the_command_leaves_a_page_and_says_where(tmp_path, capsys):
    flags = ["--problem", "tree-2x2^1-noise1", "--budget", "6", "--policy", "thompson", "--seeds", "4"]
    assert command_line(["rehearse", "--out", str(tmp_path), *flags, "--scorer", FAST]) == 0
    assert "| tree-2x2^1-noise1 | 6 | cold-store-fast |" in capsys.readouterr().out
    assert (tmp_path / "rehearsal.html").read_text().startswith("<!DOCTYPE html>")
    assert (tmp_path / "table.md").exists()
    assert "| tree-2x2^1-noise1 | Gaussian | 6 |" in (tmp_path / "cells.md").read_text()
    assert command_line(["rehearse", "--out", str(tmp_path), *flags, "--scorer", FAST, "--estimate"]) == 0
    assert "minutes on one core" in capsys.readouterr().out


def test_the_command_tells_the_aims_once(tmp_path, capsys):
    """One form for all: with a single scorer its counts are those of the best one, and stood there twice."""
    flags = ["--problem", "tree-2x2^1-noise1", "--budget", "2ms@1ms", "--policy", "thompson", "--seeds", "4"]
    assert command_line(["rehearse", "--out", str(tmp_path), *flags, "--scorer", FAST]) == 0
    told = [line for line in capsys.readouterr().out.splitlines() if re.search(r"\| (<= )?0\.85 \|", line)]
    assert [line.split("|")[1] for line in told] == [" better of UCT and both Thompson samplings "]


@pytest.mark.parametrize(
    ("flags", "message"),
    [
        (["--budget", "6"], "--problem: must be given without --quick or --full"),
        (["--quick", "--full"], "--quick: cannot go with --full"),
        (["--quick", "--policy", "uct:c=-1"], "c: must be >= 0 and finite; got -1.0"),
        (["--quick", "--policy", "uct:c=nan"], "c: must be >= 0 and finite; got nan"),
        (
            ["--quick", "--policy", f"scorer:{FAST}:prior=1e300"],
            "prior: must be from 1e-06 to 1e+06; got 1e+300",
        ),
        (["--quick", "--budget", "0"], "budget: must have room for a rollout; got '0'"),
        (["--quick", "--budget", "1ms@5ms"], "budget: must have room for a rollout; got '1ms@5ms'"),
        (["--quick", "--budget", "8", "--budget", "8"], "budgets: must each be given once; got '8'"),
        (
            ["--quick", "--problem", "taxi", "--problem", "taxi"],
            "problems: must each be given once; got 'taxi'",
        ),
        (["--quick", "--problem", "tree-4x4^9-noise4"], "problem: must have at most 4,096 leaves; got"),
        (["--quick", "--policy", "uct:stop=auto"], "policy 'uct:stop=auto': has no price to stop at"),
        (
            ["--quick", "--policy", f"scorer:{FAST}:stop=auto"],
            f"tuning_seeds: must be above 0 to tune 'scorer:{FAST}:stop=auto'; got 0",
        ),
        (
            ["--quick", "--policy", f"scorer:{FAST.replace('cold-store-fast', 'on-time')}"],
            "must be able to score the trees of some problem",
        ),
        (
            ["--problem", "taxi", "--budget", "8", "--stops"],
            "--stops: needs a scorer file: --scorer FILE.onnx",
        ),
        (["--sheets", FAST, "--seeds", "9"], "--sheets: rehearses nothing, so it cannot go with --seeds"),
        (["--quick", "--problem", "chess"], "problem: must be one of taxi,"),
        (["--quick", "--budget", "fast"], "budget: must be rollouts (128), or time and cost (20ms@100us)"),
        (["--quick", "--policy", "luck"], "policy 'luck': must begin with one of even,"),
        (["--quick", "--policy", "uct:d=1"], "policy 'uct:d=1': options of uct are: c; got 'd'"),
        (["--quick", "--policy", "uct:c=x"], "policy 'uct:c=x': c: must be a number; got 'x'"),
        (
            ["--quick", "--policy", f"scorer:{FAST}:prior=auto:stop=auto", "--tuning-seeds", "9"],
            "must leave one option to tuning",
        ),
        (["--quick", "--policy", "scorer:none.onnx"], "must name a file that exists; got 'none.onnx'"),
    ],
)
def test_bad_flags_are_one_clear_line(tmp_path, capsys, flags, message):
    assert command_line(["rehearse", "--out", str(tmp_path / "out"), *flags]) == 2
    error = capsys.readouterr().err
    assert message in error
    assert error.count("\n") == 1


def test_the_tours_rehearsal_is_a_plan_with_a_scorer(tmp_path):
    summary = quick([FAST], tmp_path, seeds=3)
    assert {row["policy"] for row in summary["comparisons"]} >= {"cold-store-fast"}
    assert (tmp_path / "summary.json").exists()
    assert summary["campaign"]["seeds"] == 3


def test_plans_know_the_scorers_uses():
    campaign = plan("quick", scorers=[FAST])
    assert [p for p in campaign.policies if p.startswith("scorer:")] == [
        f"scorer:{FAST}",
        f"scorer:{FAST}:late=0.5:every=2:share=0.2",
    ]
    full = plan("full", scorers=[FAST, FAST.replace("-fast", "")])
    assert full.seeds >= 400
    assert full.stops == full.plenty == ()
    assert not any("stop" in p for p in full.policies)
    stops = plan("full", scorers=[FAST, FAST.replace("-fast", "")], stopping=True, tuning_seeds=9)
    assert stops.stops == (
        f"scorer:{FAST}:late=0.5",
        f"scorer:{FAST}:late=0.5:stop=auto",
    )  # one a kind of inputs
    assert stops.plenty == ("4096",)
    assert (stops.policies, stops.budgets) == (full.policies, full.budgets)
    assert set(full.wide) <= set(full.problems)
    records = FAST.replace("cold-store-fast", "crossing-traffic")
    uses = [
        p.partition(".onnx")[2]
        for p in plan("full", scorers=[FAST, records]).policies
        if p.startswith("scorer:")
    ]
    assert len(uses) == 2 * len(set(uses))  # each the first of its kind of inputs: the same uses
    assert plan("full", budgets=["8"]).wide_budgets == ()
