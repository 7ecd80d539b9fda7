"""What a page is made of: the figures that train, ship or a tour left, as one; floor 7."""

from __future__ import annotations

import contextlib
import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import Any, Final

from distill.errors import InputError
from distill.sheet import FRONT_FORMAT, SHEET_FORMAT

__all__ = ["SHARES", "Facts", "Figures", "ends", "gaps_refused", "known", "plain", "time_of"]

Figures = Mapping[str, Any]
SHARES: Final = ("forgone_percent", "relative_forgone_percent")


@contextlib.contextmanager
def gaps_refused() -> Iterator[None]:
    """A part that the figures lack, or that is of another kind, as one clear error."""
    try:
        yield
    except KeyError as e:
        raise InputError(f"report: {e.args[0]}", "is missing from the figures") from None
    except (TypeError, ValueError, AttributeError) as e:
        raise InputError("report", f"the figures must be as train, ship or tour leave them ({e})") from None


@dataclass(frozen=True)
class Shown:
    """A scorer that pictures and tables show beside its peers."""

    name: str
    accuracy: Figures
    latency: Figures
    pairs: Figures | None


@dataclass(frozen=True)
class Facts:
    """What the three kinds of figures have in common; `sheet` is None where no scorer was chosen yet."""

    title: str
    value: Figures
    data: Figures
    parts: Mapping[str, Figures]
    seed: int
    features: Sequence[str]
    made_with: Mapping[str, str]
    scorers: Sequence[Figures]
    beside: Mapping[str, Figures]
    leaves: int
    exact: Mapping[str, Figures]
    sheet: Figures | None
    summary: Figures
    peers: Mapping[str, Figures]
    break_even: Figures
    shifts: Mapping[str, Figures]
    backup: Mapping[str, Figures]
    peers_left_out: Mapping[str, str]

    @classmethod
    def read(cls, figures: Figures) -> Facts:
        """From `front.json`, a sheet, or a summary that holds a sheet as `scorer`."""
        top = figures.get("scorer", figures)
        kind = top.get("format")
        if kind == SHEET_FORMAT:
            title, scorers, timed = top["file"]["name"], top["front"], top["decision"]
            data = {name: x for name, x in top["data"].items() if name != "parts"}
            parts = top["data"]["parts"]
        elif kind == FRONT_FORMAT:
            title, scorers, timed = "Trained scorers", top["scorers"], top
            data, parts = top["data"], top["parts"]
        else:
            raise InputError(
                "report: format", f"must be {FRONT_FORMAT!r}, {SHEET_FORMAT!r} or a tour's summary", kind
            )
        return cls(
            title, top["value"], data, parts, top["seed"], top["features"], top["made_with"], scorers,
            top["beside"], timed["leaves"], timed["exact"], top if kind == SHEET_FORMAT else None,
            figures if top is not figures else {}, top.get("peers", {}), top.get("break_even", {}),
            figures.get("shifts") or top.get("shifts") or {}, timed.get("backup") or {},
            top.get("peers_left_out", {}),
        )  # fmt: skip

    @property
    def shown(self) -> list[Shown]:
        """The shipped scorer, or those on the front."""
        sheet = self.sheet
        if sheet is not None:
            return [Shown("this scorer", sheet["accuracy"], sheet["decision"]["scorer"], sheet.get("pairs"))]
        front = (e for e in self.scorers if e["on_front"])
        return [Shown(e["recipe"], e["held_out"], e["latency"], e.get("pairs")) for e in front]

    @property
    def judged(self) -> dict[str, Figures]:
        """Name and accuracy of what is shown, then of its peers, on all held-out trees where known."""
        return {**{one.name: one.accuracy for one in self.shown}, **self.without_scorer}

    @property
    def without_scorer(self) -> dict[str, Figures]:
        """Name and accuracy of picks without a trained scorer."""
        return {**self.beside, **{name: m for name, m in self.peers.items() if name not in self.beside}}

    @property
    def partly_judged(self) -> dict[str, str]:
        """Peers that were judged on a part of the held-out trees only -> on how many of them, in words."""
        every = self.parts["held_out"]["trees"]
        counts = {name: m.get("trees") for name, m in self.peers.items() if name not in self.beside}
        return {
            name: "on a part of the trees" if n is None else f"on {n:,} of the trees"
            for name, n in counts.items()
            if n is None or n < every
        }

    @property
    def most_accurate(self) -> Shown | None:
        """The shipped scorer; of a front its slowest, the most accurate on the trees kept for choosing."""
        return max(self.shown, key=lambda one: time_of(one.latency), default=None)


# --- one figure ------------------------------------------------------------------------------------


def plain(x: Any) -> float | None:
    """A figure of the JSON; None is one that no tree defines. Raises InputError on anything else."""
    if x is not None and (type(x) not in (int, float) or not math.isfinite(x)):
        raise InputError("report", "every figure must be a finite number or null", x)
    return x  # type: ignore[no-any-return]


def known(x: Any) -> float:
    """A figure that must be there."""
    value = plain(x)
    if value is None:
        raise InputError("report", "a sampled value must be a number", x)
    return value


def time_of(t: Figures, key: str = "p50_us") -> float:
    """A time of `timing.Timing.to_json`, above 0."""
    value = plain(t[key])
    if value is None or not value > 0:
        raise InputError(f"report: {key}", "must be above 0", value)
    return value


def ends(e: Figures) -> tuple[float | None, float | None, float | None]:
    """Value, lower and upper end of the interval of a figure; None for what it has not."""
    return plain(e["value"]), plain(e.get("low")), plain(e.get("high"))
