"""A tremor as it was examined: one window, or an unloaded and a loaded one with the load between them and what it says."""

from __future__ import annotations

from dataclasses import dataclass

from lagscape.case.case import Case
from lagscape.errors import RecordingError
from lagscape.questions.tremor_load import Load, LoadAnswer, answer_of_load
from lagscape.recordings.tremor import TremorMeasurement

__all__ = ["TremorStudy", "tremor_study"]


@dataclass(frozen=True, eq=False)
class TremorStudy:
    """What was measured, and the answer; where two windows give none, `refusal` says why."""

    unloaded: TremorMeasurement
    loaded: TremorMeasurement | None
    load: Load | None
    answer: LoadAnswer | None
    refusal: str

    @property
    def conditions(self) -> tuple[tuple[str, TremorMeasurement], ...]:
        """Name and measurement of each condition, unloaded first."""
        return (("unloaded", self.unloaded),) if self.loaded is None else (("unloaded", self.unloaded), ("loaded", self.loaded))


def tremor_study(unloaded: TremorMeasurement, loaded: TremorMeasurement | None = None, load: Load | None = None,
                 case: Case | None = None) -> TremorStudy:  # fmt: skip
    """The study of one or two windows, answered against a reflex case where there is one."""
    if loaded is None:
        return TremorStudy(unloaded, None, load, None, "")
    try:
        return TremorStudy(unloaded, loaded, load, answer_of_load(unloaded, loaded, load, case), "")
    except RecordingError as problem:
        sentence = str(problem)
        return TremorStudy(unloaded, loaded, load, None, sentence[:1].upper() + sentence[1:] + ".")
