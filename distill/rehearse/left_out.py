"""Why a policy does not play on a problem under a budget: in words, and as data where time is the reason."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from typing import Any, Final

__all__ = ["CHOICE", "DECISION", "Reason"]

CHOICE: Final = "choice"
DECISION: Final = "decision"
# What took too long -> how its reason begins. Older folders hold the words alone.
_BEGINS: Final = {CHOICE: "one choice takes", DECISION: "choosing takes"}


@dataclass(frozen=True)
class Reason:
    """Words, and where something took too long: what, CHOICE or all choices of a DECISION, and how long.

    >>> Reason.slow(CHOICE, 0.099)
    Reason(why='one choice takes 99.0 ms', too_slow='choice', seconds=0.099)
    """

    why: str
    too_slow: str | None = None
    seconds: float | None = None

    @classmethod
    def slow(cls, what: str, seconds: float) -> Reason:
        """Something took so many seconds, which is too long."""
        took = f"{seconds * 1e3:.1f} ms" if what == CHOICE else f"{seconds * 1e3:.0f} ms a decision"
        return cls(f"{_BEGINS[what]} {took}", what, seconds)

    @classmethod
    def of(cls, found: Mapping[str, Any] | str) -> Reason:
        """A reason from a file, as `asdict` gives it, among more if need be, or as words alone.

        >>> Reason.of("choosing takes 45 ms a decision")
        Reason(why='choosing takes 45 ms a decision', too_slow='decision', seconds=None)
        """
        about: Mapping[str, Any] = {"why": found} if isinstance(found, str) else found
        why = about["why"]
        begun = next((what for what, words in _BEGINS.items() if why.startswith(words)), None)
        return cls(why, about.get("too_slow", begun), about.get("seconds"))

    @property
    def kind(self) -> str:
        """The words without the time, which is another one in every place."""
        return self.why if self.too_slow is None else f"{_BEGINS[self.too_slow]} too long"

    def as_json(self) -> dict[str, Any]:
        """What `of` reads."""
        return asdict(self)
