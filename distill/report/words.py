"""Words and style of the report page: no figures, no logic; floor 7."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Final

__all__ = [
    "AUDIT_WORDS", "CAPTIONS", "CAUTION", "COLUMNS", "INFER_WORDS", "LOOK_WORDS", "SHARE_NAMES", "STYLE",
    "WORDS",
]  # fmt: skip

CAUTION: Final = (
    "The scorer only spends search effort; it is no safety function. Where machines move loads near people, "
    "machine-safety standards, local codes and licensed practice decide."
)

SHARE_NAMES: Final = {"forgone_percent": "forgone share", "relative_forgone_percent": "relative forgone"}
COLUMNS: Final = {
    **{key: f"{name}, %" for key, name in SHARE_NAMES.items()},
    "top1_percent": "picks that are best, %",
    "rank_correlation": "rank correlation",
    "stop_loss_percent": "stop loss, %",
    "in_range_percent": "in range, %",
}

CAPTIONS: Final = {
    "front": (
        "Each dot is a trained scorer: to the left it decides faster, further down it loses less. Upright "
        "lines are intervals. Filled dots, joined, are on the front: on trees kept for choosing, no other "
        "scorer beat them in both time and loss. The other colour: picks without a trained scorer, a dashed "
        "line where their time was not measured. What has no loss at all stands on the lower edge, marked 0; "
        "an interval that reaches the edge goes on below it."
    ),
    "ring": "The ringed dot is the scorer this page is about.",
    "loss": (
        "Further left is better; each step of the scale is ten times the one before. Broad lines are "
        "intervals, in brackets above. A random pick's loss is an expectation and has none."
    ),
    "part": "Peers that the table of accuracy marks were judged on a part of the held-out trees.",
    "time": (
        "Further left is better; each step of the scale is ten times the one before. A dot is the median; "
        "the broad line runs on to the time that 99 of 100 decisions keep, in brackets above."
    ),
    "pairs": (
        "Each dot is one candidate of a held-out tree; on the line, the scorer's value is the exact one. "
        "Values are shares of the tree's scale, so trees of any unit stand side by side."
    ),
    "slices": (
        "Forgone share of held-out trees parted by what they are, each part about as large. Further left "
        "is better; broad lines are intervals. What lost less than the lower edge stands on it. The table by "
        "slice has every figure."
    ),
    "bound": (
        "A calibrated upper bound comes with each score. Each dot: of the candidates scored about so high, "
        "the share whose exact value lies within the bound; hollow, where they are fewer than 200."
    ),
    "sizes": (
        "Each dot: of the candidates scored about so high, the mean exact value as a multiple of the mean "
        "score; hollow, where they are fewer than 200. Above the line scores are too low, below it too high."
    ),
    "stop": (
        "An agent goes on while the best score is worth its price. What it loses a tree by stopping or going "
        "on where exact values say the opposite; beside it, what is lost by never rolling out and by never "
        "stopping. What is lost nowhere stands on the lower edge, marked 0."
    ),
    "break-even": (
        "A way to pick that forgoes little but decides slowly pays where rollouts are dear. Worked out from "
        "the measured forgone shares and times on the assumption that every rollout costs one scoring: what "
        "each way gains in a given time, as a share of what exact picks would that took no time. An agent "
        "that spends several rollouts on one scoring reads its chart at the cost of them all. Best:"
    ),
    "shifts": (
        "Fresh trees of the scorer's family, and of families that differ from it in one thing each. Round: "
        "the scorer, broad lines its intervals; the other colour: the first-order closed form on the same "
        "trees. Further left is better."
    ),
    "backup": (
        "A scorer of records reads rows that the backup fills: its time comes on top of the scorer's, in "
        "full at a new tree and after one rollout from then on."
    ),
    "flagged": (
        "Flagged: some leaf of the tree lies outside what training saw, and the scorer says so. Loss "
        "flagged: of all that its picks forgo, the part in flagged trees. Bound holds: candidates at or "
        "below their upper bound."
    ),
    "traces": "On decisions of a real search, recorded and kept from the training of every scorer here.",
    "tree": "The best candidate is the one to spend the next rollouts on.",
}

WORDS: Final = {
    "rollout": "One simulated run from a leaf of the search tree; it tells a little about the leaf's worth.",
    "leaf": "A possible future at the rim of the search tree, whose worth is still uncertain.",
    "candidate": "A computation that could be done next: some rollouts at one leaf.",
    "value of computation (VOC)": (
        "How much better the finally chosen action is expected to be thanks to a candidate, in the unit in "
        "which the tree counts worth. It is 0 for a computation that could change no decision."
    ),
    "rate": (
        "The best value a rollout that any number of rollouts at the leaf buys, within the rollouts left."
    ),
    "static, dynamic, horizon": (
        "What is assumed to follow a candidate: nothing more is learned before the later decisions (static), "
        "everything becomes known before them (dynamic), or each leaf gets a stated number of rollouts "
        "(horizon)."
    ),
    "exact": "Computed to a stated error bound; the yardstick of this page.",
    "scorer": "A small trained model in one file that estimates every candidate's value and picks the best.",
    "forgone share": (
        "Value lost because picks are not always the best: over all trees together, best value minus the "
        "pick's, as a share of the best. Trees where much is at stake count for more."
    ),
    "relative forgone": (
        "The same loss as a share of each tree's own best value, averaged over trees. Late in a search every "
        "value is tiny; here such trees count as much as any other."
    ),
    "picks that are best": "Share of trees where the pick has the best value; ties count.",
    "rank correlation": (
        "How well the order of candidates within a tree agrees with the exact order, averaged over trees: "
        "1 in full, 0 not at all."
    ),
    "stop loss": (
        "Net value lost by stopping, or by going on, where exact values say the opposite, at the leaves' own "
        "cost of a rollout; as a share of all that the best candidates net."
    ),
    "in range": (
        "Share of candidates whose every feature lies within what training saw; outside it, a score deserves "
        "no trust."
    ),
    "held-out trees": "Trees that had no part in training or in choosing among the scorers.",
    "interval": (
        "The figure worked out again on the same trees, drawn anew many times with replacement (bootstrap), "
        "lies between these ends in the share of draws stated with the tables."
    ),
    "front": "The scorers that no other beats in both forgone share and decision time.",
    "median, 99 of 100": (
        "Of many timed decisions, the time that half of them keep, and the time that 99 of 100 keep. A "
        "decision is what an agent does: plain arrays in, the pick out, on one thread."
    ),
    "static closed form": "A formula for the static rate; it does not see what will be learned later.",
    "first-order closed form": (
        "A formula that sets one leaf against the best rival; the value from which the scorer starts."
    ),
    "static VOC of one rollout": "The static closed form for a single rollout instead of the best batch.",
    "moment matching with quadrature": (
        "The other leaves' best outcome taken as one Gaussian of matching moments, then a numerical integral."
    ),
    "Monte Carlo in equal time": "The value by simulation, with as many samples as take the scorer's time.",
    "UCT": "Picks by an upper confidence bound from means and counts; it works out no value.",
    "Thompson sampling": "Picks the leaf that is best in one draw of all beliefs; it works out no value.",
    "random pick": "Any candidate with equal chance: what is lost without any judgement.",
    "scale of a tree": "The largest standard deviation that any of its leaves brings to the root.",
    "slices of trees": (
        "Parts of the trees, by the number of leaves; by rollouts left; by noise, the variance of a rollout "
        "over that of its leaf, at the median leaf; by the gap between the best two actions, each counted by "
        "its best leaf's mean, over the tree's scale; by depth, edges from the root to the deepest leaf; by "
        "visits, rollouts so far."
    ),
}
_LOOK: Final = {
    "label": "The exact value of a candidate, with a bound on its error; what a scorer learns.",
    "aside": "Trees that no exact method prices within the tolerance: counted, kept apart, not labelled.",
    "weight": (
        "What a tree counts for where some were drawn with higher chances than others; 1 on average. All of "
        "them together are worth fewer trees of equal weight, the number that is stated."
    ),
    "method": "What worked out the labels of a tree.",
    "best label": "The largest label of a tree.",
}
_INFER: Final = {
    "decision": "A choice of the agent's; trees recorded at its stages are drawn again together.",
    "family": "A distribution over trees, in one file; `generate` draws from it.",
    "prior, prior sd, prior mean": "What a leaf is believed to be worth before its first rollout.",
    "noise sd": "Standard deviation of one rollout's result around the leaf's true value.",
    "strength, win rate, span": (
        "Of leaves that win or lose: alpha + beta before the first rollout, the share of it that is alpha, "
        "and how much more a win is worth than a loss."
    ),
    "gain, discount": (
        "A leaf counts at the root by the product of the discounts on its way, its gain; a family has one "
        "discount for every edge of a tree."
    ),
    "depth, branching": (
        "Most edges from the root to a leaf of an action; children of a node above the last level."
    ),
    "budget": "Rollouts of the whole search of one decision, spent and left.",
    "evenness of probabilities": "Parameter of the Dirichlet distribution under chance nodes: large is even.",
    "correlation, shared part": "Share of a leaf's prior variance that the nodes above it bring.",
    "fits, does not fit, cannot be told": (
        "Whether the traces agree with the model that a family stands on, contradict it, or hold too little "
        "to say."
    ),
    "distance": "Largest difference of two distribution functions: 0 alike, 1 apart.",
}
_AUDIT: Final = {
    "promised": "What the scorer's sheet states, measured on held-out trees of its training data.",
    "margin": "By how many points a loss may exceed the promised one before the scorer counts as worse.",
    "worth adding": (
        "Recorded trees with a leaf out of range, or where the pick lost more than a hundredth of the best "
        "value, or stopping went wrong."
    ),
    "drift, distance": (
        "How far recorded trees are from those of training, column by column: the largest difference of the "
        "two distribution functions, 0 alike, 1 apart."
    ),
    "feature": "A number without unit that the scorer works out of each leaf before its learner sees it.",
}


def _glossary(*terms: str, more: Mapping[str, str]) -> dict[str, str]:
    """Terms of WORDS and a page's own, with their texts."""
    return {term: WORDS[term] for term in terms} | dict(more)


LOOK_WORDS: Final = _glossary(
    "rollout", "leaf", "candidate", "value of computation (VOC)", "rate", "static, dynamic, horizon",
    "scale of a tree", more=_LOOK,
)  # fmt: skip
INFER_WORDS: Final = _glossary("rollout", "leaf", "interval", "scale of a tree", more=_INFER)
AUDIT_WORDS: Final = _glossary(
    "rollout", "candidate", "value of computation (VOC)", "exact", *SHARE_NAMES.values(),
    "picks that are best", "rank correlation", "stop loss", "in range", "held-out trees", "interval",
    "scale of a tree", more=_AUDIT,
)  # fmt: skip

# No ">" or "&" here: the page is read as HTML and as XML.
STYLE: Final = """
*{box-sizing:border-box}
body{margin:0;background:var(--paper);color:var(--ink);
 font:1rem/1.5 system-ui,-apple-system,'Segoe UI',Roboto,'Helvetica Neue',Arial,sans-serif;
 -webkit-text-size-adjust:100%}
main{max-width:70rem;margin:0 auto;padding:1.5rem 1rem 3rem}
h1,h2,h3{line-height:1.25;overflow-wrap:anywhere}
h1{font-size:1.7rem;margin:0 0 .5rem}
h2{font-size:1.25rem;margin:2.5rem 0 .75rem;padding-top:1rem;border-top:1px solid var(--line)}
h3{font-size:1rem;margin:0 0 .25rem}
p{margin:.5rem 0;max-width:46rem}
.caution{border-left:4px solid var(--peer);padding:.25rem 0 .25rem .75rem}
.note,figcaption,.interval{color:var(--quiet);font-size:.875rem}
.tiles{display:grid;grid-template-columns:repeat(auto-fit,minmax(11.5rem,1fr));gap:.75rem;
 margin:1.5rem 0 0;padding:0}
.tiles div{border:1px solid var(--line);border-radius:.5rem;padding:.75rem 1rem}
.tiles dt{color:var(--quiet);font-size:.875rem}
.tiles dd{margin:0}
.tiles strong{font-size:1.5rem;font-weight:600}
.interval{display:block;font-size:.8125rem;white-space:nowrap}
.tiles .interval{white-space:normal}
.pictures{columns:26rem 2;column-gap:2rem}
figure{margin:0 0 2rem;break-inside:avoid}
figure svg{display:block;width:100%;max-width:33rem;height:auto;margin:.25rem 0 .5rem}
figcaption{max-width:33rem}
figcaption ul{margin:.25rem 0 0;padding-left:1.25rem}
table{border-collapse:collapse;width:100%;font-variant-numeric:tabular-nums}
th,td{padding:.4rem .75rem .4rem 0;text-align:left;vertical-align:top;border-bottom:1px solid var(--line)}
thead th{color:var(--quiet);font-size:.875rem;font-weight:600;vertical-align:bottom}
tbody th{font-weight:600;overflow-wrap:anywhere}
td{overflow-wrap:anywhere}
.mark{display:block;font-size:.75rem;font-weight:400;color:var(--scorer);white-space:nowrap}
.words{display:grid;grid-template-columns:minmax(8rem,14rem) 1fr;gap:.5rem 1.5rem;margin:0}
.words dt{font-weight:600;overflow-wrap:anywhere}
.words dd{margin:0;max-width:46rem;overflow-wrap:anywhere;min-width:0}
@media (min-width:64rem){
 data{white-space:nowrap}
 tbody th{min-width:8rem}
}
@media (max-width:42rem){
 h1{font-size:1.4rem}
 .tiles{grid-template-columns:repeat(2,minmax(0,1fr))}
 .interval{white-space:normal}
 .tiles div{padding:.6rem .75rem}
 .tiles strong{font-size:1.25rem}
 thead{position:absolute;width:1px;height:1px;overflow:hidden;clip-path:inset(50%)}
 table,tbody,tr,tbody th,td{display:block}
 tr{padding:.6rem 0;border-bottom:1px solid var(--line)}
 tbody th,td{border:0;padding:.1rem 0}
 td{display:flex;justify-content:space-between;gap:1rem;text-align:right}
 td.none{display:none}
 td::before{content:attr(data-label);color:var(--quiet);text-align:left;flex:0 1 auto;min-width:35%}
 .words{grid-template-columns:1fr;gap:0}
 .words dd{margin-bottom:.75rem}
}
@media print{tr{break-inside:avoid}}
""".strip()
