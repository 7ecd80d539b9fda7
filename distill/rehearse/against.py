"""What the regret of a problem is against: the exact optimum, or many rollouts at each leaf."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Final

if TYPE_CHECKING:
    from distill.rehearse.problems import Draw

__all__ = ["EXACT", "Against", "against_sentences", "kind_of"]

EXACT: Final = "exact optimum"


@dataclass(frozen=True)
class Against:
    """leaf_rollouts : at each leaf, that tell what actions are worth; 0 where their exact worth is known.

    error : standard error of a decision's regret that this leaves, mean over the decisions; value units.

    >>> str(Against()), str(Against(4000, 0.1))
    ('exact optimum', '4,000 rollouts a leaf')
    """

    leaf_rollouts: int = 0
    error: float = 0.0

    @classmethod
    def of(cls, draws: Iterable[Draw]) -> Against:
        """Of a problem's decisions, all judged by as many rollouts."""
        known = list(draws)
        return cls(known[0].leaf_rollouts, sum(draw.worth_error for draw in known) / len(known))

    def __str__(self) -> str:
        return f"{self.leaf_rollouts:,} rollouts a leaf" if self.leaf_rollouts else EXACT

    def as_json(self) -> dict[str, Any]:
        """For the summary."""
        return {"regret_against": str(self), "leaf_rollouts": self.leaf_rollouts, "error": self.error}


def against_sentences(summary: Mapping[str, Any]) -> list[str]:
    """What the regret of each problem of a summary is against, with the caution that an estimate needs."""
    found: dict[str, Mapping[str, Any]] = summary.get(
        "against", {}
    )  # earlier versions knew the optimum alone
    exact = [name for name, x in found.items() if not x["leaf_rollouts"]]
    if len(exact) == len(found):
        return ["Regret against: exact optimum."]
    told = [f"Regret against: exact optimum on {', '.join(exact)}."] if exact else []
    told += [
        f"Regret against: {x['regret_against']} on {name}, what unlimited rollouts would choose in the tree "
        f"that is searched. The standard error of a decision's regret is {x['error']:.2g} (value units): a "
        "mean regret below it is noise, a larger one is too large by up to about as much."
        for name, x in found.items()
        if x["leaf_rollouts"]
    ]
    if exact:
        told.append(
            "The two are no common measure: means over problems are taken apart, and counts of aims and "
            "break-even are of the problems with an exact optimum alone."
        )
    return told


def kind_of(draw: Draw) -> str:
    """What may stand in one mean: neither other leaves nor another sort of regret."""
    kind = "win/loss" if draw.tree.belief == "win_loss" else "Gaussian"
    if draw.tree.has_chance:
        kind += ", chance nodes"
    return f"{kind}, against {Against(draw.leaf_rollouts)}" if draw.leaf_rollouts else kind
