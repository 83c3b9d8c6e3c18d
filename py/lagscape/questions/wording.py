"""The standing as a sentence that a colleague could read aloud, and the distance to the boundary in the words of the clinic."""

from __future__ import annotations

from lagscape.questions.standing import Judgement, Standing

__all__ = ["cycle_words", "distance_sentence", "seconds_words", "standing_sentence"]


def _round(value: float, digits: int = 2) -> str:
    text = f"{float(f'{value:.{digits - 1}e}'):f}".rstrip("0").rstrip(".")
    return text


def seconds_words(seconds: float) -> str:
    """A duration as said: whole seconds from ten up, one decimal below."""
    return f"{seconds:.0f} s" if seconds >= 10.0 else f"{_round(seconds)} s"


def cycle_words(judged: Judgement) -> str:
    """How often the loop goes round: a cycle length, or a frequency where a cycle takes under a second."""
    length = judged.cycle_length
    if length is None:
        return ""
    return seconds_words(length) if length >= 1.0 else f"{_round(1.0 / length)} Hz"


def standing_sentence(judged: Judgement) -> str:
    """The verdict in one or two short sentences."""
    length = judged.cycle_length
    if judged.standing is Standing.HUNTS:
        if length is None:
            return "Hunts. Left alone, this loop does not come to rest."
        every = f"cycles every {cycle_words(judged)}" if length >= 1.0 else f"beats at {cycle_words(judged)}"
        silent = judged.silent_time
        if judged.loop.kind != "breathing":
            return f"Hunts. Left alone, this loop {every}."
        if silent is None:
            return f"Hunts. Left alone, this loop {every}."
        if silent <= 0.0:
            return f"Hunts. Left alone, this loop {every}, without apnoea."
        return f"Hunts. Left alone, this loop {every} with {seconds_words(silent)} of apnoea."
    if judged.standing is Standing.RINGS:
        cycles = judged.cycles_to_settle or 0.0
        many = _round(cycles) if cycles < 10.0 else f"{cycles:.0f}"
        of = f"cycles of {cycle_words(judged)}" if length is not None and length >= 1.0 else f"beats at {cycle_words(judged)}"
        return f"Rings. A disturbance dies away over about {many} {of}."
    if length is None:
        return "Settles. A disturbance dies away without oscillating."
    if length < 1.0:
        return "Settles. A disturbance falls under 5 % within one beat."
    return f"Settles. A disturbance falls under 5 % within one cycle of {cycle_words(judged)}."


def distance_sentence(judged: Judgement) -> str:
    """How far from the boundary, along sensitivity and along delay."""
    found = judged.margins
    hunts = judged.standing is Standing.HUNTS
    parts = []
    if found.gain_margin is not None:
        change = found.gain_margin - 1.0
        if hunts and change < 0.0:
            parts.append(f"{-100.0 * change:.0f} % less sensitivity")
        elif not hunts:
            many = f"{100.0 * change:.0f} %" if change < 9.0 else f"{found.gain_margin:.0f} times the"
            parts.append(f"{many} more sensitivity" if change < 9.0 else f"{many} sensitivity")
    if found.delay_margin_s is not None:
        delay = abs(found.delay_margin_s)
        many = seconds_words(delay) if delay >= 1.0 else f"{1000.0 * delay:.0f} ms"
        parts.append(f"{many} {'less' if found.delay_margin_s < 0.0 else 'more'} delay")
    if not parts:
        return "No change of sensitivity or delay alone takes it across the boundary."
    return f"To the boundary: {' or '.join(parts)}."
