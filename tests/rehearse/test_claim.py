"""A campaign's folder is its own: nothing is written before all is checked, nothing is replaced unasked."""

from __future__ import annotations

import json
import shutil
from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path

import pytest

from distill import tour
from distill.cli import run as command_line
from distill.errors import DistillError, InputError
from distill.rehearse import plans
from distill.rehearse.campaign import Campaign, run
from distill.rehearse.policy_specs import make_policy, scorer_file
from distill.rehearse.results import write_results

MODELS = Path(__file__).parents[2] / "models"
FAST = str(MODELS / "cold-store-fast.onnx")
TINY = Campaign(
    problems=("tree-2x2^1-noise1",), budgets=("4",), policies=("even", "static-rate"), seeds=2, tuning_seeds=0
)


@pytest.mark.parametrize("policy", ["exact-horizon:h=-2", "scorer:{}/no.onnx", "scorer:{}/bad.onnx"])
def test_bad_arguments_leave_nothing_behind(policy: str, tmp_path: Path) -> None:
    """A horizon below 0, a file that is not there, one that is no scorer: told before anything is written."""
    (tmp_path / "bad.onnx").write_bytes(b"no model")
    out = tmp_path / "out"
    args = ["--problem", TINY.problems[0], "--budget", "4", "--policy", policy.format(tmp_path)]
    assert command_line(["rehearse", *args, "--seeds", "2", "--tuning-seeds", "0", "--out", str(out)]) == 2
    assert not out.exists() or list(out.iterdir()) == []


def test_a_folder_takes_more_and_never_loses_what_it_shows(tmp_path: Path) -> None:
    """Policies may be added, and all stay in the summary; a campaign without the earlier ones is refused."""
    run(TINY, tmp_path)
    more = replace(TINY, policies=(*TINY.policies, f"scorer:{FAST}"))
    told: list[tuple[int, int]] = []
    summary = write_results(run(more, tmp_path, progress=lambda done, of: told.append((done, of))), tmp_path)
    assert (told[0], told[-1]) == ((0, 1), (1, 1))  # what was done for fewer policies is not done for more
    assert {"even", "static_rate", "cold-store-fast"} <= {row["policy"] for row in summary["rows"]}
    before = (tmp_path / "campaign.json").read_bytes()
    for other in (TINY, replace(more, problems=("tree-2x2^1-noise4",)), replace(more, budgets=("8",))):
        with pytest.raises(InputError) as refused:
            run(other, tmp_path)
        assert str(tmp_path) in str(refused.value)
        assert "another --out" in str(refused.value)
    assert (tmp_path / "campaign.json").read_bytes() == before
    run(more, tmp_path)  # the same again resumes


def test_another_file_under_the_same_path_is_refused(tmp_path: Path) -> None:
    file = tmp_path / "mine.onnx"
    shutil.copy(FAST, file)
    campaign = replace(TINY, policies=(f"scorer:{file}",))
    run(campaign, tmp_path / "out")
    assert list(json.loads((tmp_path / "out" / "campaign.json").read_text())["scorers"]) == [str(file)]
    shutil.copy(MODELS / "cold-store.onnx", file)
    with pytest.raises(InputError, match="another scorer file of this path"):
        run(campaign, tmp_path / "out")


def test_two_files_of_one_name_are_told_apart_or_refused(tmp_path: Path) -> None:
    """Cells bear a policy's name, so two policies must not share one."""
    (tmp_path / "b").mkdir()
    shutil.copy(MODELS / "cold-store.onnx", tmp_path / "b" / "cold-store-fast.onnx")
    second = f"scorer:{tmp_path / 'b' / 'cold-store-fast.onnx'}"
    with pytest.raises(InputError, match="must not have the name of"):
        run(replace(TINY, policies=(f"scorer:{FAST}", second)), tmp_path / "out")
    assert not (tmp_path / "out").exists()
    run(replace(TINY, policies=(f"scorer:{FAST}", f"{second}:name=second")), tmp_path / "out")


def test_a_path_may_hold_colons_and_equal_signs(tmp_path: Path) -> None:
    folder = tmp_path / "run:seed=3"
    folder.mkdir()
    file = folder / "a:b=c.onnx"
    shutil.copy(FAST, file)
    assert scorer_file(f"scorer:{file}:every=4") == (str(file), ["every=4"])
    assert scorer_file(f"scorer:{file}") == (str(file), [])
    assert make_policy(f"scorer:{file}:every=4").name == "a:b=c-every4"
    summary = write_results(
        run(replace(TINY, policies=(f"scorer:{file}",)), tmp_path / "out"), tmp_path / "out"
    )
    assert [x["file"] for x in summary["scorers"]] == ["a:b=c.onnx"]
    with pytest.raises(DistillError, match="options of scorer are"):
        make_policy(f"scorer:{file}:bogus=1")
    for text in ("scorer", "scorer:", "scorer:every=4"):
        with pytest.raises(InputError, match="must name a file"):
            make_policy(text)


def test_a_tour_again_rehearses_its_new_scorer(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The fast scorer of a tour is chosen by measured time, so the next tour's may be another file."""
    tiny = replace(plans.plan("quick"), problems=TINY.problems, budgets=("0.4ms@100us",), seeds=2)

    def quick_plan(*_: object, scorers: Sequence[str] = (), **__: object) -> Campaign:
        return replace(tiny, policies=(*TINY.policies, *(f"scorer:{file}" for file in scorers)))

    monkeypatch.setattr(plans, "plan", quick_plan)
    shas = []
    for model in ("cold-store-fast.onnx", "cold-store.onnx"):
        shutil.copy(MODELS / model, tmp_path / "scorer-fast.onnx")
        tour._rehearse(tmp_path, 0, lambda *_: None)
        shas.append(json.loads((tmp_path / "rehearsal" / "summary.json").read_text())["scorers"][0]["sha256"])
    assert len(set(shas)) == 2
    campaign = tmp_path / "rehearsal" / "campaign.json"
    own = campaign.read_text().replace(TINY.problems[0], "taxi")
    campaign.write_text(own)
    with pytest.raises(InputError, match="must not hold a rehearsal of other problems"):
        tour._rehearse(tmp_path, 0, lambda *_: None)
    assert campaign.read_text() == own
