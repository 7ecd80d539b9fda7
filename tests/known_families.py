"""Ten families that `infer` must find again, and what is true of each."""

from __future__ import annotations

import numpy as np

from distill.family import Family, parse_family

_HEAD = 'format = "tree-family/1"\nname = "{name}"\nbelief = "{belief}"\n'
_SEARCH = "search = { even = 1, uct = 1, thompson = 2, static_rate = 2, switch = 0.02 }\n"

_BODIES = {
    "flat": """
shape = { actions = 5, leaves = 1 }
prior = { sd = 1, mean = { normal = [0.5, 1] } }
noise = { sd = 2 }
budget = { rollouts = [20, 60], used = [0, 1] }
""",
    "bushy": """
shape = { actions = [2, 4], leaves = [6, 12], depth = [2, 4], branching = [2, 4] }
edge = { reward = { normal = [0.1, 0.3] }, discount = [0.9, 1] }
prior = { scale = 3, action = { normal = [0, 0.6] }, mean = { normal = [0, 0.4] }, sd = 1 }
noise = { sd = { log_uniform = [0.5, 4] } }
budget = { rollouts = { log_uniform = [8, 256] }, used = [0, 1], fresh = 0.1 }
""",
    "wide units": """
shape = { actions = 3, leaves = [2, 6], depth = [2, 3], branching = 2 }
edge = { reward = { normal = [0, 0.5] } }
prior = { scale = { log_uniform = [0.01, 100] }, mean = { normal = [0, 1] }, sd = { log_uniform = [0.5, 2] } }
noise = { sd = 3 }
cost = { tree = { log_uniform = [1e-4, 1e-2] } }
budget = { rollouts = { log_uniform = [16, 512] }, used = [0, 0.8] }
""",
    "uneven trees": """
shape = { actions = [2, 6], leaves = [1, 8], depth = 2 }
prior = { tree_sd = { log_uniform = [0.3, 3] }, action = { normal = [1, 0.5] }, sd = 2 }
noise = { tree_sd = { log_uniform = [0.5, 4] }, sd = { log_uniform = [0.5, 2] } }
budget = { rollouts = 100, used = { choice = [0, 0.25, 0.5] } }
""",
    "low noise": """
shape = { actions = 2, leaves = [3, 9], depth = 3, branching = 3 }
prior = { sd = 1, mean = { normal = [0, 0.3] } }
noise = { sd = 0.05 }
budget = { rollouts = [10, 40], used = [0, 1] }
""",
    "high noise": """
shape = { actions = 4, leaves = 4, depth = 3, branching = [2, 3] }
edge = { discount = { choice = [0.9, 0.99] } }
prior = { sd = { log_uniform = [0.5, 2] }, mean = { normal = [-1, 0.5] } }
noise = { sd = { log_uniform = [10, 40] } }
budget = { rollouts = { log_uniform = [64, 2048] }, used = [0, 1] }
""",
    "shared": """
shape = { actions = [2, 4], leaves = [2, 6], depth = [2, 3], branching = 2 }
[prior]
scale = { log_uniform = [1, 10] }
action = { normal = [0, 0.5] }
sd = { log_uniform = [0.7, 1.4] }
[correlation]
shared = [0.2, 0.8]
[noise]
sd = 2
[budget]
rollouts = [16, 128]
used = [0, 1]
""",
    "chancy": """
shape = { actions = [2, 4], leaves = [2, 8], depth = [2, 4], branching = [2, 3] }
chance = { share = 0.4, evenness = 2 }
edge = { reward = { normal = [0.2, 0.2] }, discount = 0.95 }
prior = { sd = 1, mean = { normal = [0, 0.5] } }
noise = { tree_sd = { log_uniform = [0.5, 4] }, sd = 1 }
budget = { rollouts = [16, 64], used = [0, 1], fresh = 0.2 }
""",
    "on time": """
shape = { actions = [2, 5], leaves = [1, 6], depth = [2, 3], branching = [2, 3] }
prior = { strength = 2, win_rate = [0.2, 0.9] }
budget = { rollouts = { log_uniform = [16, 256] }, used = [0, 1] }
""",
    "pays by the pallet": """
shape = { actions = 3, leaves = [2, 5], depth = 2 }
edge = { reward = { normal = [0, 0.2] } }
cost = { tree = 1e-3 }
budget = { rollouts = [20, 80], used = [0, 1] }
[prior]
scale = { log_uniform = [0.5, 20] }
strength = { log_uniform = [1, 8] }
win_rate = 0.4
low = -0.5
span = { log_uniform = [0.5, 2] }
""",
}


def known_families() -> dict[str, Family]:
    """Name -> family."""
    out = {}
    for name, body in _BODIES.items():
        belief = "win_loss" if "win_rate" in body else "gaussian"
        text = _HEAD.format(name=name, belief=belief) + _SEARCH + body
        out[name] = parse_family(text.encode(), name)
    return out


def truth(family: Family, n: int = 400_000) -> dict[str, float]:
    """Parameter -> its true value; from many draws of each field, far finer than any estimate's interval."""
    rng = np.random.default_rng(1)

    def drawn(key: str) -> np.ndarray:
        return family[key].draw(rng, n)

    budget, used = drawn("budget.rollouts"), drawn("budget.used")
    spent = np.minimum(np.floor(budget * used), budget - 1)
    spent *= rng.random(n) >= family.number("budget.fresh")
    out = {
        "root actions": drawn("shape.actions").mean(),
        "leaves an action": drawn("shape.leaves").mean(),
        "discount": drawn("edge.discount").mean(),
        "budget, typical": np.exp(np.log(budget).mean()),
        "share of the budget spent": (spent / budget).mean(),
        "trees with nothing spent, share": (spent == 0).mean(),
    }
    if family["shape.leaves"].support[1] > 1:
        out["depth"] = drawn("shape.depth").mean()
        if family["shape.depth"].support[1] > 2:
            out["branching"] = drawn("shape.branching").mean()
    if family.has("chance"):
        out["chance nodes, share of inner ones"] = family.number("chance.share")
        out["evenness of probabilities"] = drawn("chance.evenness").mean()
    reward = drawn("edge.reward")
    scale = np.log(drawn("prior.scale"))
    out["unit, spread of log between trees"] = scale.std()
    if family.belief == "win_loss":
        span = np.log(drawn("prior.span"))
        unit = np.exp(span.mean())
        strength = np.log(drawn("prior.strength"))
        rate = drawn("prior.win_rate")
        out |= {
            "span, typical": np.exp(scale.mean() + span.mean()),
            "span, spread of log between leaves": span.std(),
            "strength, typical": np.exp(strength.mean()),
            "strength, spread of log": strength.std(),
            "win rate": rate.mean(),
            "win rate, sd": rate.std(),
            "value of a loss": drawn("prior.low").mean() / unit,
            "value of a loss, sd": drawn("prior.low").std() / unit,
        }
    else:
        level, leaf = np.log(drawn("prior.tree_sd")), np.log(drawn("prior.sd"))
        noise_level, noise = np.log(drawn("noise.tree_sd")), np.log(drawn("noise.sd"))
        unit = np.exp(level.mean() + leaf.mean())
        action, mean = drawn("prior.action"), drawn("prior.mean")
        out |= {
            "prior sd, typical": np.exp(scale.mean()) * unit,
            "prior sd, spread of log between trees": level.std(),
            "prior sd, spread of log between leaves": leaf.std(),
            "noise sd, typical": np.exp(noise_level.mean() + noise.mean()) / unit,
            "noise sd, spread of log between trees": noise_level.std(),
            "noise sd, spread of log between leaves": noise.std(),
            "prior mean": (action.mean() + mean.mean()) / unit,
        }
        if family["shape.leaves"].support[1] > 1:
            out["prior mean, sd between actions"] = action.std() / unit
            out["prior mean, sd between leaves"] = mean.std() / unit
        else:
            out["prior mean, sd between leaves"] = np.hypot(action.std(), mean.std()) / unit
        if family.has("correlation"):
            out["correlation, shared part"] = drawn("correlation.shared").mean()
    out |= {"reward": reward.mean() / unit, "reward, sd": reward.std() / unit}
    cost = drawn("cost.tree")
    if cost.max() > 0:
        out["cost, typical"] = np.exp(np.log(cost).mean()) / unit
        out["cost, spread of log between trees"] = np.log(cost).std()
    return {name: float(x) for name, x in out.items()}
