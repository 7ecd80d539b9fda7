"""Problems of one's own by name: MODULE:NAME, so that commands and workers can make them."""

from __future__ import annotations

import importlib
import sys
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from distill.errors import DistillError, InputError
from distill.rehearse.problems import Draw, Problem, SimulatorProblem

__all__ = ["own_problem"]


@dataclass(frozen=True)
class _Named:
    """A problem under the text that it was asked for by: every worker makes it from that."""

    problem: Problem
    name: str

    def draw(self, seed: int) -> Draw:
        return self.problem.draw(seed)


def own_problem(text: str) -> Problem:
    """The problem that MODULE:NAME names; the module runs, as any import does.

    NAME : a `Problem`, or called without arguments for one; (simulator, settings) become a
    `SimulatorProblem`. The present folder is looked in too. Raises InputError where nothing such is found,
    or the code raises.
    """
    module, _, name = text.partition(":")
    if not module or not name.isidentifier():
        raise InputError("problem", "must be MODULE:NAME, such as my_simulator:problem", text)
    if (here := str(Path.cwd())) not in sys.path:
        sys.path.append(here)
    try:
        found: Any = getattr(importlib.import_module(module), name)
        if callable(found) and not hasattr(found, "draw"):
            found = found()
        if isinstance(found, tuple) and len(found) == 2:
            found = SimulatorProblem(*found)
    except DistillError:
        raise
    except Exception as e:  # whatever the code of others raises
        raise InputError(f"problem {text}", f"must be made without an error ({type(e).__name__}: {e})") from e
    if not callable(getattr(found, "draw", None)):
        rule = "must be a problem, or a function that returns one or (simulator, settings)"
        raise InputError(f"problem {text}", rule, type(found).__name__)
    return _Named(found, text)
