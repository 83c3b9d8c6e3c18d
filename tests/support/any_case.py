"""Random cases for property tests: every loop, every float in range, spreads, levers, settings."""

from hypothesis import strategies as st

from lagscape.case.case import (
    LARGEST_SETTING,
    MOST_LEVERS,
    Case,
    DisturbanceSetting,
    LeverSetting,
    Number,
    disturbance_units,
    largest_spread,
    specifications,
)
from lagscape.case.parameters import Basis
from lagscape.loops.register import LOOPS

__all__ = ["any_case", "longest_case"]


@st.composite
def any_case(draw: st.DrawFn) -> Case:
    kind = draw(st.sampled_from(list(LOOPS)))
    numbers = {
        name: Number(
            draw(st.floats(item.minimum, item.maximum)),
            draw(st.sampled_from(Basis)),
            draw(st.none() | st.floats(0.0, largest_spread(item))),
        )
        for name, item in specifications(kind).items()
    }
    choices = {item.name: draw(st.sampled_from(list(item.options))) for item in LOOPS[kind].choices}
    setting = st.floats(-LARGEST_SETTING, LARGEST_SETTING)
    names = draw(st.lists(st.from_regex(r"[a-z][a-z0-9_]{0,47}", fullmatch=True), max_size=MOST_LEVERS, unique=True))
    levers = tuple(LeverSetting(name, draw(setting)) for name in names)
    shown = draw(st.none() | st.builds(DisturbanceSetting, st.sampled_from(list(disturbance_units(kind))), setting))
    start = draw(st.sampled_from([None, *(item.name for item in LOOPS[kind].starting_cases)]))
    return Case(kind, numbers, choices, levers, shown, start)


def longest_case(kind: str, seed: int) -> Case:
    """A case as long as a case gets: every number and spread with 17 digits, every lever laid with a long name."""
    import numpy as np

    generator = np.random.default_rng(seed)
    numbers = {}
    for name, item in specifications(kind).items():
        value = _long_float(generator, item.minimum, item.maximum)
        numbers[name] = Number(value, list(Basis)[generator.integers(3)], _long_float(generator, 0.0, largest_spread(item)))
    choices = {item.name: max(item.options, key=len) for item in LOOPS[kind].choices}
    words = [
        "oxygen", "posture", "lung", "dead_space", "descent", "mass", "velocity", "flow", "reflex",
        "share", "rate", "volume", "exercise", "waking",
    ]  # fmt: skip
    levers = tuple(
        LeverSetting(f"{word}_{words[-index - 1]}_{generator.integers(1000, 9999)}_l_min", _long_float(generator, 0.0, 1.0))
        for index, word in enumerate(words[:MOST_LEVERS])
    )
    shown = DisturbanceSetting(max(disturbance_units(kind), key=len), _long_float(generator, 0.0, 1.0))
    return Case(kind, numbers, choices, levers, shown, max((item.name for item in LOOPS[kind].starting_cases), key=len))


def _long_float(generator, low: float, high: float) -> float:
    """A float whose shortest exact decimal has 17 significant digits."""
    while True:
        value = float(generator.uniform(low, high))
        if len(f"{value!r}".replace(".", "").lstrip("0").split("e")[0]) >= 17:
            return value
