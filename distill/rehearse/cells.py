"""All decisions of one policy on one problem under one budget, and the file that they are kept in."""

from __future__ import annotations

import hashlib
import io
import json
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from pathlib import Path
from typing import Final

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from distill.dataset_columns import Described, described_schema
from distill.errors import InputError
from distill.files import write_atomic
from distill.record import to_record
from distill.rehearse.loop import Budget, Decided
from distill.rehearse.problems import Problem
from distill.tree import Floats

__all__ = ["Cell", "digest", "file_of", "read_cell", "write_cell"]

_DIGESTED: Final = 8  # leaves whose first return counts in telling problems apart
_F64: Final = pa.float64()

# Column -> (type, meaning and unit). `u` is the problem's own unit of value.
_DECIDED: Final[Described] = {
    "regret": (_F64, "u; loss of the chosen action against the best one"),
    "regret_by_mean": (_F64, "u; the same, had the action with the largest backed-up mean been chosen"),
    "expected_regret": (_F64, "u; mean regret over all that the rollouts seen leave open; nan if unknown"),
    "rollouts": (_F64, "number spent"),
    "choosing": (_F64, "s; time of the policy and of belief updates"),
    "stopped": (_F64, "1 where the search stopped early, else 0"),
    "choices": (_F64, "number made"),
    "fallbacks": (_F64, "number of them that another rule made"),
}
_PROCESSOR: Final = "processor"  # column of seconds, not of what was decided
_COLUMNS: Final[Described] = {
    "seed": (pa.int64(), "number of the decision, from which all its luck follows"),
    **_DECIDED,
    _PROCESSOR: (_F64, "s; time of the process, judging included; 0 where another cell's file counts it"),
}


@dataclass(frozen=True, eq=False)
class Cell:
    """All decisions of one policy on one problem under one budget; arrays over seeds, in seed order.

    regret, regret_by_mean, expected_regret : value units, see `Decided`. rollouts : spent.
    choosing : seconds. stopped : early.
    choices : made. fallbacks : of them, made by another rule. processor : seconds of this process that
    each decision took, judging it included; empty where not known.
    """

    problem: str
    budget: Budget
    policy: str
    regret: Floats
    regret_by_mean: Floats
    expected_regret: Floats
    rollouts: Floats
    choosing: Floats
    stopped: Floats
    choices: Floats
    fallbacks: Floats
    processor: Floats = field(default_factory=lambda: np.zeros(0))

    @classmethod
    def of(
        cls, problem: str, budget: Budget, policy: str, found: Sequence[Decided], seconds: Sequence[float]
    ) -> Cell:
        """What came of each decision, and the processor time of each."""
        columns = {c: np.array([getattr(r, c) for r in found], dtype=np.float64) for c in _DECIDED}
        return cls(problem, budget, policy, **columns, processor=np.array(seconds, dtype=np.float64))

    def __len__(self) -> int:
        """Decisions."""
        return len(self.regret)

    def followed_by(self, later: Cell, kept: int | None = None) -> Cell:
        """These decisions, or the first `kept` of them, and later ones of the same cell.

        Processor times that are not known count as 0.
        """
        columns = {}
        for name in (*_DECIDED, _PROCESSOR):
            before = getattr(self, name) if len(getattr(self, name)) else np.zeros(len(self))
            columns[name] = np.concatenate([before[:kept], getattr(later, name)])
        return Cell(self.problem, self.budget, self.policy, **columns)

    @property
    def measured(self) -> Floats:
        """The regret to compare by: `expected_regret` where that is known, else `regret`."""
        return self.regret if np.any(np.isnan(self.expected_regret)) else self.expected_regret

    @property
    def fallback_share(self) -> float:
        """Share of choices that another rule made: near 1, the cell does not show its policy at all."""
        choices = float(self.choices.sum())
        return float(self.fallbacks.sum()) / choices if choices > 0 else float("nan")

    @property
    def choosing_share(self) -> float:
        """Share of all time that went into choosing, given the budget's cost of a rollout; else nan."""
        rolling = float(self.rollouts.sum()) * self.budget.rollout_seconds
        choosing = float(self.choosing.sum())
        return choosing / (choosing + rolling) if rolling > 0 else float("nan")


# --- files -----------------------------------------------------------------------------------------


def file_of(folder: Path, problem: str, budget: Budget, policy: str) -> Path:
    """The file of a cell: what is readable of it, and a hash of all of it."""
    key = json.dumps([problem, asdict(budget), policy])
    readable = "".join(c if c.isalnum() else "-" for c in f"{problem}--{policy}")
    return folder / f"{readable[:80]}--{hashlib.sha256(key.encode()).hexdigest()[:12]}.parquet"


def digest(problem: Problem, seed: int) -> str:
    """SHA-256 of what a problem deals at one seed: two that share a name are told apart by it."""
    draw = problem.draw(seed)
    found = hashlib.sha256(json.dumps(to_record(draw.tree), sort_keys=True).encode())
    found.update(draw.worth.tobytes())
    for leaf in range(min(draw.tree.n_leaves, _DIGESTED)):
        found.update(np.float64(draw.roll(leaf)).tobytes())
    return found.hexdigest()


def write_cell(path: Path, cell: Cell, first_seed: int, drawn: str) -> None:
    """Write a cell whose decisions are those of `first_seed` and on; drawn : the problem's `digest`."""
    about = {"problem": cell.problem, "policy": cell.policy, "budget": asdict(cell.budget), "drawn": drawn}
    columns = {"seed": np.arange(first_seed, first_seed + len(cell))}
    columns |= {c: getattr(cell, c) for c in (*_DECIDED, _PROCESSOR)}
    table = pa.table(columns, described_schema(_COLUMNS, {"rehearsal": json.dumps(about)}))
    buffer = io.BytesIO()
    pq.write_table(table, buffer)
    write_atomic(path, buffer.getvalue())


def read_cell(path: Path, problem: str, budget: Budget, policy: str, seeds: range, drawn: str) -> Cell | None:
    """The decisions of the first of these seeds, as many as the file holds; None where there is none."""
    if not path.exists():
        return None
    try:
        table = pq.read_table(path)
        about = json.loads((table.schema.metadata or {}).get(b"rehearsal", b"{}"))
    except (OSError, ValueError, pa.ArrowException) as e:
        raise InputError(
            str(path), f"must be a readable Parquet file; delete it to play it again ({e})"
        ) from None
    if not isinstance(about, dict) or about.get("drawn") != drawn:
        rule = f"holds decisions of another problem named {problem}: its simulator or settings have changed"
        raise InputError(str(path), f"{rule}; give another folder")
    names = set(table.column_names)
    if not {"seed", *_DECIDED} <= names or table["seed"].to_pylist() != list(seeds[: table.num_rows]):
        rule = f"must hold the decisions of seeds {seeds.start} and on, {len(seeds)} at most, one a row"
        raise InputError(str(path), f"{rule}; delete it to play it again")
    columns = [c for c in (*_DECIDED, _PROCESSOR) if c in names]
    return Cell(problem, budget, policy, **{c: table[c].to_numpy() for c in columns})
