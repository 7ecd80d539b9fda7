"""Exact optimum of a simulator with a model: every reachable state, values and best actions."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from scipy.sparse import csr_array, eye_array
from scipy.sparse.linalg import splu

from distill.errors import RefusedError, ToleranceError
from distill.rehearse.simulator import Action, Modelled, State, outcomes_of
from distill.tree import Floats, Ints

__all__ = ["Optimum", "solve"]

_STRICT = 1e-12  # an improvement below this share of the largest value is rounding
_MAX_ITERATIONS = 1000


@dataclass(frozen=True, eq=False)
class Optimum:
    """Optimal values of every state that can be reached from the given ones.

    values : state -> expected discounted return of the best policy, value units; terminal states 0.
    action_values : state -> the same for each action taken first, in the order of `actions`.
    policy : state -> a best action (the first on ties).
    residual : largest violation of Bellman's optimality equation by `values`, value units; for a
        discount below 1 the values are off by at most residual / (1 - discount).
    """

    values: dict[State, float]
    action_values: dict[State, Floats]
    policy: dict[State, Action]
    residual: float


def solve(
    simulator: Modelled,
    starts: Iterable[State],
    *,
    tolerance: float = 1e-10,
    max_states: int = 200_000,
) -> Optimum:
    """Optimal values by policy iteration (Howard 1960; Puterman 1994, section 6.4).

    Starts from the uniformly random policy and changes an action only where it is strictly better, ties
    going to the action that ends sooner under random play: with discount 1 every policy met then ends
    too, if random play does. Each policy is evaluated by one sparse linear solve, so `values` is the
    value of a policy to rounding, and `residual` certifies that no action improves it.

    Raises RefusedError above `max_states` states, or where random play never ends and nothing is
    discounted; ToleranceError where the residual stays above `tolerance` (relative to the largest value
    where that exceeds 1).
    """
    table = _Table.of(simulator, starts, max_states)
    uniform = table.uniform()
    v = table.evaluate(uniform, table.reward)
    time_left = table.evaluate(uniform, np.ones(len(table.reward)))
    row: Ints | None = None
    for _ in range(_MAX_ITERATIONS):
        q = table.action_values(v)
        slack = _STRICT * max(1.0, float(np.max(np.abs(v), initial=0.0)))
        best = table.greedy(q, slack, time_left)
        if row is not None:
            better = q[best] > q[row] + slack
            if not np.any(better):
                break
            best = np.where(better, best, row)
        row = best
        v = table.evaluate(table.only(row), table.reward)
    q = table.action_values(v)
    gap = table.best(q) - v[table.live]
    residual = float(np.max(np.abs(gap), initial=0.0))
    if not residual <= tolerance * max(1.0, float(np.max(np.abs(v), initial=0.0))):
        raise ToleranceError(f"{simulator.name}: optimum found only to {residual:.3g}, wanted {tolerance:g}")
    return table.read_out(v, q, residual)


@dataclass(frozen=True, eq=False)
class _Table:
    """The model as arrays. Rows are (state, action) pairs, those of one state side by side."""

    name: str
    states: list[State]
    actions: list[Action]
    first_row: Ints  # of each live state, and the number of rows at the end
    live: Ints  # state index of each state that is not terminal
    reward: Floats  # expected, of each row
    onward: csr_array  # rows x states: discount x probability

    @classmethod
    def of(cls, simulator: Modelled, starts: Iterable[State], max_states: int) -> _Table:
        index: dict[State, int] = {s: i for i, s in enumerate(dict.fromkeys(starts))}
        states = list(index)
        rng = np.random.default_rng(0)  # a modelled simulator draws nothing
        actions: list[Action] = []
        first_row, live, reward = [0], [], []
        rows, ends, weights = [], [], []
        position = 0
        while position < len(states):
            state = states[position]
            if not simulator.is_terminal(state):
                live.append(position)
                choices = simulator.actions(state)
                if not choices:
                    raise RefusedError(f"{simulator.name}: a state that is not terminal has no action")
                for action in choices:
                    expected = 0.0
                    for prob, after, r in outcomes_of(simulator, state, action, rng):
                        if after not in index:
                            if len(states) >= max_states:
                                raise RefusedError(
                                    f"{simulator.name}: more than {max_states} reachable states to solve"
                                )
                            index[after] = len(states)
                            states.append(after)
                        expected += prob * r
                        rows.append(len(actions))
                        ends.append(index[after])
                        weights.append(simulator.discount * prob)
                    actions.append(action)
                    reward.append(expected)
                first_row.append(len(actions))
            position += 1
        onward = csr_array((weights, (rows, ends)), shape=(len(actions), len(states)))
        columns = (np.array(first_row), np.array(live, dtype=np.int64), np.array(reward))
        return cls(simulator.name, states, actions, *columns, onward)

    def action_values(self, v: Floats) -> Floats:
        return np.asarray(self.reward + self.onward @ v)

    def best(self, q: Floats) -> Floats:
        """Largest action value of each live state."""
        return np.maximum.reduceat(q, self.first_row[:-1]) if len(self.live) else np.zeros(0)

    def greedy(self, q: Floats, slack: float, time_left: Floats) -> Ints:
        """Row of a best action of each live state: of those within `slack`, the one that ends soonest."""
        near = q >= np.repeat(self.best(q), np.diff(self.first_row)) - slack
        delay = np.where(near, self.onward @ time_left, np.inf)
        spans = zip(self.first_row[:-1], self.first_row[1:], strict=True)
        return np.array([lo + int(np.argmin(delay[lo:hi])) for lo, hi in spans], dtype=np.int64)

    def uniform(self) -> csr_array:
        """Live states x rows: the uniformly random policy."""
        size = np.diff(self.first_row)
        return csr_array(
            (np.repeat(1 / size, size), np.arange(len(self.actions)), self.first_row),
            shape=(len(self.live), len(self.actions)),
        )

    def only(self, row: Ints) -> csr_array:
        """Live states x rows: the policy that takes these rows."""
        n = len(self.live)
        return csr_array((np.ones(n), row, np.arange(n + 1)), shape=(n, len(self.actions)))

    def evaluate(self, policy: csr_array, reward: Floats) -> Floats:
        """Value of a policy: (I - policy onward) v = policy reward over the live states."""
        v = np.zeros(len(self.states))
        if len(self.live):
            step = (policy @ self.onward)[:, self.live]
            try:
                v[self.live] = splu((eye_array(len(self.live)) - step).tocsc()).solve(policy @ reward)
            except RuntimeError:
                raise RefusedError(f"{self.name}: some play never ends and nothing is discounted") from None
        return v

    def read_out(self, v: Floats, q: Floats, residual: float) -> Optimum:
        per_state = {
            self.states[s]: (q[lo:hi], self.actions[lo + int(np.argmax(q[lo:hi]))])
            for s, lo, hi in zip(self.live, self.first_row[:-1], self.first_row[1:], strict=True)
        }
        return Optimum(
            values=dict(zip(self.states, v.tolist(), strict=True)),
            action_values={s: values for s, (values, _) in per_state.items()},
            policy={s: action for s, (_, action) in per_state.items()},
            residual=residual,
        )
