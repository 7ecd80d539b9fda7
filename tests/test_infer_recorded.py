"""From an agent's own loop through `Recorder.see` to what `infer` says of it: stages, noise, discounts."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill.family import draw
from distill.infer import Inferred, infer
from distill.recorder import Recorder
from distill.traces import BadLines, read_many
from distill.tree import BeliefTree, leaf_table

GAIN, STAGES = 0.97, 5


def recorded(folder: Path, decisions: int, *, wander: float = 0.0, noise_sd: float = 2.0) -> list[BeliefTree]:
    """What a loop of Thompson sampling hands to a recorder: each decision's table at STAGES stages.

    wander : sd that each true leaf value moves between stages, which the beliefs do not know. noise_sd : of a
    rollout; the beliefs say 2.
    """
    rng = np.random.default_rng(0)
    with Recorder(folder, strict=True) as recorder:
        for decision in range(decisions):
            action = np.repeat(np.arange(3), rng.integers(2, 5, 3))
            n = len(action)
            mean, var, count = 0.5 * rng.standard_normal(n), np.ones(n), np.zeros(n, dtype=int)
            truth = mean + rng.standard_normal(n)
            for stage in range(STAGES):
                recorder.see(
                    mean=mean, var=var, noise_var=np.full(n, 4.0), gain=np.full(n, GAIN), action=action,
                    count=count, remaining=64 - 12 * stage, extra={"decision": f"shuttle 7, {decision}"},
                )  # fmt: skip
                for _ in range(12):
                    i = int(np.argmax(mean + np.sqrt(var) * rng.standard_normal(n)))
                    seen = truth[i] + noise_sd * rng.standard_normal()
                    mean[i] += var[i] / (var[i] + 4) * (seen - mean[i])
                    var[i] *= 4 / (var[i] + 4)
                    count[i] += 1
                truth = truth + wander * rng.standard_normal(n)
    return [tree for _, tree in read_many(sorted(folder.glob("*.jsonl.gz")), BadLines(strict=True))]


def verdicts(inferred: Inferred) -> dict[str, str]:
    return {f.about: f.verdict for f in inferred.findings}


def test_a_recorded_loop_has_its_drift_and_noise_tested(tmp_path: Path) -> None:
    found = infer(recorded(tmp_path, 120))
    said = verdicts(found)
    for about in ("means that move as their variance says", "noise that is Gaussian", "independent siblings"):
        assert said[about] == "fits"
    assert "contradicts" not in said.values()
    assert found.figures["decisions"] == 120
    assert found.parameters["share of the budget spent"].value == pytest.approx(24 / 64)


@pytest.mark.parametrize("changes", [{"wander": 0.5}, {"noise_sd": 3.0}])
def test_a_recorded_loop_tells_of_drift_and_of_noise_stated_wrongly(
    tmp_path: Path, changes: dict[str, float]
) -> None:
    said = verdicts(infer(recorded(tmp_path, 120, **changes)))
    assert said["means that move as their variance says"] == "contradicts"


def test_trees_of_the_inferred_family_have_the_recorded_gains(tmp_path: Path) -> None:
    """A table's record has the whole gain on the edge of the leaf; the family has one discount an edge."""
    found = infer(recorded(tmp_path, 20))
    assert found.parameters["discount"].value == pytest.approx(GAIN**0.5)
    for i in range(20):
        gain = leaf_table(draw(found.family, 0, i)).gain
        np.testing.assert_allclose(gain, GAIN, rtol=CLOSED_FORM)
    assert found.figures["compared"]["columns"]["gain"]["distance"] == 0
    assert "one discount a tree" not in verdicts(found)


def test_gains_that_one_discount_does_not_give_are_named_and_kept_on_average(tmp_path: Path) -> None:
    gains = np.array([0.99, 0.95, 0.9])
    with Recorder(tmp_path, strict=True) as recorder:
        for i in range(4):
            recorder.see(
                mean=[0.0, i, 1.0], var=[1.0] * 3, noise_var=[4.0] * 3, gain=gains, action=[0, 0, 1],
                count=[0, 0, 0], remaining=8,
            )  # fmt: skip
    found = infer([tree for _, tree in read_many(list(tmp_path.glob("*.jsonl.gz")), BadLines(strict=True))])
    assert verdicts(found)["one discount a tree"] == "contradicts"
    # The lone leaf of action 1 has one edge in the family, the others have two.
    assert found.parameters["discount"].value == pytest.approx(np.prod(gains) ** (1 / 5))
    drawn = [np.log(leaf_table(draw(found.family, 0, i)).gain).mean() for i in range(200)]
    seen = found.figures["compared"]["columns"]["gain"]
    assert seen["traces"][2] == pytest.approx(np.exp(np.log(gains).mean()), rel=1e-5)
    assert seen["drawn"][2] == pytest.approx(np.exp(np.median(drawn)), rel=1e-5)


@pytest.mark.parametrize("win_loss", [False, True])
def test_trees_of_the_inferred_family_have_offsets_like_the_recorded_ones(
    tmp_path: Path, win_loss: bool
) -> None:
    """A table's record has the whole offset on the edge of the leaf; a family has rewards on every edge."""
    rng = np.random.default_rng(1)
    action, n = np.repeat(np.arange(3), 4), 12
    ones = np.ones(n)
    beliefs = (
        {"alpha": ones, "beta": ones, "low": 0 * ones, "high": ones}
        if win_loss
        else {"mean": 0 * ones, "var": ones, "noise_var": 4 * ones}
    )
    with Recorder(tmp_path, strict=True) as recorder:
        for _ in range(200):
            offset = 3 + 0.5 * rng.standard_normal(n)
            recorder.see(
                **beliefs, gain=0.9 * ones, offset=offset, action=action, count=0 * action, remaining=8
            )
    found = infer([tree for _, tree in read_many(list(tmp_path.glob("*.jsonl.gz")), BadLines(strict=True))])
    drawn = [leaf_table(draw(found.family, 0, i)).offset for i in range(400)]
    means = np.array([x.mean() for x in drawn])
    assert abs(means.mean() - 3) < STANDARD_ERRORS * (means.std() / 20 + 0.5 / np.sqrt(200 * n))
    squares = np.array([np.mean((x - 3) ** 2) for x in drawn])
    assert abs(squares.mean() - 0.25) < STANDARD_ERRORS * (squares.std() / 20 + 0.25 * np.sqrt(2 / (200 * n)))
