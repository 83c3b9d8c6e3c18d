"""Long reading in small steps, so that whoever waits can show how far it is, answer something else meanwhile, or stop it.

A function whose name ends in `_steps` is a generator: after each step it yields what is done and what there is in all (None
where unknown), in a unit of its own, and at last returns its answer. Closing it lets go of what it holds.
"""

from collections.abc import Generator
from typing import TypeVar

from lagscape.recordings.recording import Progress, report_progress

__all__ = ["Steps", "finished", "part_of"]

Answer = TypeVar("Answer")
Steps = Generator[tuple[int, int | None], None, Answer]


def finished(steps: Steps[Answer], progress: Progress | None = None) -> Answer:
    """Take all steps in one go and give the answer.

    Raises
    ------
    ReadCancelled
        If the progress callback returned False. What the steps raise is passed on.
    """
    try:
        while True:
            done, total = next(steps)
            report_progress(progress, done, total)
    except StopIteration as end:
        answer: Answer = end.value
        return answer
    finally:
        steps.close()


def part_of(steps: Steps[Answer], first: int, last: int, total: int) -> Steps[Answer]:
    """The same steps, counted as the part from `first` to `last` of a larger whole."""
    try:
        while True:
            done, own_total = next(steps)
            yield (first + (last - first) * done // own_total if own_total else first), total
    except StopIteration as end:
        answer: Answer = end.value
        return answer
    finally:
        steps.close()
