"""Undo and redo: the cases a user went through, as one frozen value. Every step gives a new history."""

from __future__ import annotations

from dataclasses import dataclass, replace

from lagscape.case.case import Case
from lagscape.errors import InvalidInputError

__all__ = ["CaseHistory"]


@dataclass(frozen=True)
class CaseHistory:
    """The present case, what undo goes back to and what redo comes forward to.

    Raises
    ------
    InvalidInputError
        If `most_steps` is below 1.
    """

    present: Case
    past: tuple[Case, ...] = ()
    """Oldest first; never longer than `most_steps`."""
    future: tuple[Case, ...] = ()
    """Nearest first."""
    most_steps: int = 200

    def __post_init__(self) -> None:
        if self.most_steps < 1:
            raise InvalidInputError(f"most_steps must be at least 1; got {self.most_steps}.")

    @property
    def can_undo(self) -> bool:
        return bool(self.past)

    @property
    def can_redo(self) -> bool:
        return bool(self.future)

    def record(self, case: Case) -> CaseHistory:
        """One step on: undo comes back to what was present. What could be redone is gone. The same case again is no step."""
        if case == self.present:
            return self
        return replace(self, present=case, past=(*self.past, self.present)[-self.most_steps :], future=())

    def amend(self, case: Case) -> CaseHistory:
        """The present case replaced without a step: a drag is one `record` where it starts, then amendments."""
        return replace(self, present=case, future=())

    def undo(self) -> CaseHistory:
        """One step back; the same history where there is none."""
        if not self.past:
            return self
        return replace(self, present=self.past[-1], past=self.past[:-1], future=(self.present, *self.future))

    def redo(self) -> CaseHistory:
        """One step forward; the same history where there is none."""
        if not self.future:
            return self
        return replace(self, present=self.future[0], past=(*self.past, self.present), future=self.future[1:])
