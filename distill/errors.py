"""The errors that a user can meet; floor 0, light.

DistillError            anything the tool refuses; the command line prints it and exits with 2
+-- InputError          a record, family, dataset or flag breaks a rule
+-- RefusedError        well-formed, but no method here can do it exactly
|   +-- ToleranceError  a method exists and misses the tolerance that was asked for
+-- WorkersError        processes or a cluster that should have done the work were lost
+-- ScorerFileError     a scorer file that the loader does not accept
+-- ExportError         an estimator that cannot be shipped as it is, or a file that fails its checks
"""

from __future__ import annotations

__all__ = [
    "DistillError",
    "InputError",
    "RefusedError",
    "ToleranceError",
    "WorkersError",
    "ScorerFileError",
    "ExportError",
]


class DistillError(Exception):
    """Base of every error that the tool raises on purpose."""


class InputError(DistillError):
    """Input that breaks a rule: says where, which rule, and the value found.

    place : where, from the outside in, e.g. "trees.jsonl line 3: var[4]".
    rule : what must hold, e.g. "must be >= 0".
    value : what was found; left out of the text when not given.

    >>> str(InputError("var[4]", "must be >= 0", -1.0).at("trees.jsonl line 3"))
    'trees.jsonl line 3: var[4]: must be >= 0; got -1.0'
    """

    def __init__(self, place: str, rule: str, *value: object) -> None:
        self.place = place
        self.rule = rule
        self.value = value
        got = f"; got {_short(value[0])}" if value else ""
        # A hostile input may choose the key that is named.
        shown = place if len(place) <= 300 else f"{place[:200]}...{place[-60:]}"
        super().__init__(f"{shown}: {rule}{got}")

    def at(self, outer: str) -> InputError:
        """The same error seen from one level further out."""
        return InputError(f"{outer}: {self.place}", self.rule, *self.value)

    def __reduce__(self) -> tuple[type[InputError], tuple[object, ...]]:
        return InputError, (self.place, self.rule, *self.value)


class RefusedError(DistillError):
    """A case that no method here can do as asked; the text names the case."""


class ToleranceError(RefusedError):
    """A method exists, but its error bound exceeds the tolerance that was asked for."""


class WorkersError(DistillError):
    """Processes or a cluster that should have done the work were lost; what is done is kept."""


class ScorerFileError(DistillError):
    """A scorer file that the loader refuses; the text gives the reason."""


class ExportError(DistillError):
    """An estimator that cannot be shipped, or whose file does not repeat it; nothing was written."""


def _short(value: object, limit: int = 60) -> str:
    """One line of a value, cut where a hostile input would flood the screen."""
    if isinstance(value, int) and not isinstance(value, bool) and abs(value) >= 10**40:
        return f"a whole number of {value.bit_length()} bits"
    try:
        text = repr(value)
    except (RecursionError, ValueError):
        text = f"a {type(value).__name__}"
    return text if len(text) <= limit else text[: limit - 3] + "..."
