"""Signals brought to hand in one pass. Oracles: the digital numbers the file was made from, and a count of the bytes that were read."""

import io

import numpy as np
import pytest

from lagscape.recordings import edf_samples, effort_sum, flow_from_nasal_pressure, read_recording
from lagscape.recordings.loading import loading_steps
from lagscape.recordings.stepwise import finished
from recordings.edf_bytes import channel, edf

RAMP = np.arange(-1000, 1000)
OTHER = (7 * np.arange(600)) % 501 - 250


class Counting(io.BytesIO):
    """A stream that counts the bytes taken from it."""

    taken = 0

    def read(self, size=-1):
        part = super().read(size)
        self.taken += len(part)
        return part


def night():
    data = edf([channel("Thorax", RAMP, 100), channel("Abdomen", OTHER, 30), channel("Nasal pressure", RAMP[::-1], 100)])
    stream = Counting(data)
    return stream, len(data), read_recording(stream)


def test_loading_goes_through_the_file_once_for_all_and_reading_after_it_not_at_all():
    stream, size, recording = night()
    stream.taken = 0
    steps = list(loading_steps(recording.signal("Thorax"), recording.signal("Abdomen")))
    assert steps[-1][0] == steps[-1][1] == stream.taken == 20 * 2 * 230 < size
    for name, digital in (("Thorax", RAMP), ("Abdomen", OTHER)):
        values = recording.signal(name).samples.read(3, digital.size - 5)
        # Physical -1..1 over digital -32768..32767 (the format's own line); a few eps for gain times number plus offset.
        assert values == pytest.approx((digital[3:-5] + 32768) / 65535 * 2 - 1, abs=4e-16)
    assert stream.taken == steps[-1][1]
    assert list(loading_steps(recording.signal("Abdomen"))) == []


def test_loaded_and_unloaded_samples_are_the_same_numbers():
    _, _, recording = night()
    _, _, other = night()
    made = [flow_from_nasal_pressure(recording.signal("Nasal pressure")), effort_sum(recording.signal("Thorax"), recording.signal("Abdomen"))]
    same = [flow_from_nasal_pressure(other.signal("Nasal pressure")), effort_sum(other.signal("Thorax"), other.signal("Abdomen"))]
    finished(loading_steps(*made))
    for loaded, plain in zip(made, same, strict=True):
        assert np.array_equal(loaded.samples.read(0, 1500), plain.samples.read(0, 1500))


def test_a_signal_made_of_others_brings_those():
    stream, _, recording = night()
    finished(loading_steps(effort_sum(recording.signal("Thorax"), recording.signal("Abdomen"))))
    stream.taken = 0
    recording.signal("Thorax").samples.read(0, 2000)
    recording.signal("Abdomen").samples.read(0, 600)
    assert stream.taken == 0


def test_what_was_kept_longest_makes_room_and_what_is_too_large_is_read_when_asked_for(monkeypatch):
    stream, _, recording = night()
    monkeypatch.setattr(edf_samples, "_MOST_KEPT_BYTES", 2 * RAMP.size + 100)
    thorax, pressure = recording.signal("Thorax"), recording.signal("Nasal pressure")
    finished(loading_steps(thorax))
    finished(loading_steps(pressure))
    file = thorax.samples.file
    assert list(file.kept) == [pressure.samples.channel.first_byte]
    monkeypatch.setattr(edf_samples, "_MOST_KEPT_BYTES", RAMP.size)
    stream.taken = 0
    assert list(loading_steps(thorax)) == [] and stream.taken == 0
    assert np.array_equal(thorax.samples.read(0, 2000), thorax.samples.channel.offset + thorax.samples.channel.gain * RAMP)


def test_loading_that_is_given_up_keeps_nothing_and_can_be_done_again(monkeypatch):
    _, _, recording = night()
    monkeypatch.setattr(edf_samples, "_BLOCK_BYTES", 1000)
    thorax = recording.signal("Thorax")
    steps = loading_steps(thorax)
    done, total = next(steps)
    assert 0 < done < total
    steps.close()
    assert thorax.samples.file.kept == {}
    shares = [done / total for done, total in loading_steps(thorax)]
    assert shares == sorted(shares) and shares[-1] == 1.0 and len(shares) > 5


def test_listing_derived_channels_reads_nothing():
    from lagscape.recordings import with_derived_channels

    stream, _, recording = night()
    stream.taken = 0
    assert len(with_derived_channels(recording).signals) == 5
    assert stream.taken == 0


def test_signals_in_memory_need_no_loading():
    recording = read_recording(b"time,flow\n0,1\n1,2\n2,3\n")
    assert list(loading_steps(*recording.signals)) == []
