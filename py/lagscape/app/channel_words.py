"""The list of a recording's channels: sensors with their axes together first, then every channel, each with what it is guessed to be."""

from __future__ import annotations

from html import escape

from lagscape.handover.tremor import KIND_WORDS
from lagscape.quantities import figure
from lagscape.recordings.recording import Recording
from lagscape.recordings.tremor_sensor import Sensor, sensors_in

__all__ = ["channel_options", "rate_html", "read_as_html", "sensor_named"]

_READ_AS = {"breathing": "breathing", "acceleration": "tremor, accelerometer", "rotation": "tremor, gyroscope", "EMG": "tremor, EMG"}


def channel_options(recording: Recording, chosen: str) -> str:
    """Options for a select; `chosen` is the value of the one that is on."""
    rows = [(sensor.name, f"{len(sensor.signals)} axes, {_kind(sensor.kind)}", sensor.sampling_frequency_hz) for sensor in sensors_in(recording)]
    rows += [(signal.name, _kind(signal.kind), signal.sampling_frequency_hz) for signal in recording.signals]
    return "".join(
        f'<option value="{escape(name)}"{" selected" if name == chosen else ""}>{escape(name)} ({escape(kind)}, {figure(rate)} Hz)</option>'
        for name, kind, rate in rows
    )


def read_as_html(chosen: str) -> str:
    """What the channel is read as: the guess, for the reader to overrule."""
    options = "".join(f'<option value="{kind}"{" selected" if kind == chosen else ""}>{words}</option>' for kind, words in _READ_AS.items())
    return f'<label>Read as <select data-act="read-as" aria-label="Read as">{options}</select></label>'


def rate_html(waits: bool, refusal: str) -> str:
    """A box for the sampling rate, where a file waits that does not tell its own."""
    if not waits or "sampl" not in refusal.lower():
        return ""
    return (
        '<label class="pick"><span>Samples a second</span><input class="box" type="text" inputmode="decimal" data-act="rate" value=""'
        ' aria-label="Samples a second"></label>'
    )


def sensor_named(recording: Recording, name: str) -> Sensor:
    """The sensor or the single channel of that name.

    Raises
    ------
    RecordingError
        If there is none.
    """
    for sensor in sensors_in(recording):
        if sensor.name == name:
            return sensor
    signal = recording.signal(name)
    return Sensor(signal.name, (signal.name,), signal.kind, signal.sampling_frequency_hz)


def _kind(kind: str) -> str:
    return KIND_WORDS.get(kind, kind)
