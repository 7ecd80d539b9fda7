"""Policies against the best that any policy could do, on trees small enough to enumerate."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from best_possible import all_known, expected_maximum, least_regret, no_rollouts, regret_of
from ladder import CLOSED_FORM, STANDARD_ERRORS

from distill.rehearse.catalogue import make_problem
from distill.rehearse.loop import Budget, decide
from distill.rehearse.policy_specs import make_policy

SCORER = f"scorer:{Path(__file__).parents[2] / 'models' / 'on-time.onnx'}"


def test_the_best_possible_by_hand():
    """Two actions of one leaf: E max of two uniforms is 2/3; one rollout gives 1/2 (2/3) + 1/2 (1/2) = 7/12.

    A second one changes no choice on average: after a win, 2/3 whatever is tried; after a loss, 1/2.
    """
    assert all_known(no_rollouts(2, 1)) == pytest.approx(2 / 3, rel=CLOSED_FORM)
    assert expected_maximum(((0, 0),) * 3) == pytest.approx(3 / 4, rel=CLOSED_FORM)
    assert expected_maximum(((3, 1),)) == pytest.approx(4 / 6, rel=CLOSED_FORM)
    for rollouts, regret in ((0, 1 / 6), (1, 1 / 12), (2, 1 / 12)):
        assert least_regret(2, 1, rollouts) == pytest.approx(regret, rel=CLOSED_FORM)


@pytest.mark.parametrize(("actions", "leaves", "rollouts"), [(2, 1, 9), (2, 2, 8), (3, 2, 5), (2, 3, 6)])
def test_no_policy_beats_the_best_possible(actions, leaves, rollouts):
    best = least_regret(actions, leaves, rollouts)
    for text in ("even", "uct", "static-voc", "static-rate", "exact-dynamic-rate", SCORER):
        assert regret_of(make_policy(text), actions, leaves, rollouts) >= best * (1 - CLOSED_FORM), text


def test_the_exact_rate_and_its_scorer_come_close_to_the_best_possible():
    """On two actions of two leaves: within 5 %, and closer than the closed form and an even search."""
    best = least_regret(2, 2, 10)
    over = {
        text: regret_of(make_policy(text), 2, 2, 10) / best
        for text in ("even", "static-rate", "exact-dynamic-rate", SCORER)
    }
    assert max(over["exact-dynamic-rate"], over[SCORER]) < 1.05
    assert over["static-rate"] > over["exact-dynamic-rate"]
    assert over["even"] > over["static-rate"]


def test_the_loop_has_the_enumerated_regret():
    """Decisions played one by one against all that rollouts may return."""
    policy, problem = make_policy("static-rate"), make_problem("tree-2x2^1-winloss")
    played = [
        decide(problem.draw(seed), policy, Budget(rollouts=8), np.random.default_rng(seed)).expected_regret
        for seed in range(1500)
    ]
    error = np.std(played) / np.sqrt(len(played))
    assert abs(np.mean(played) - regret_of(policy, 2, 2, 8)) < STANDARD_ERRORS * error
