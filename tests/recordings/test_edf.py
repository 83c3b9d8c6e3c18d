"""EDF and EDF+ files, named after the field or the clause they check (Kemp et al. 1992; Kemp & Olivan 2003).

Oracles: bytes laid out by hand (edf_bytes.py), and two general libraries for the format, edfio and pyedflib.
"""

import dataclasses
import datetime
import io
import os

import edfio
import numpy as np
import pyedflib
import pytest

from lagscape.errors import RecordingError
from lagscape.recordings import ReadCancelled, measure_breathing, read_recording
from recordings.edf_bytes import annotation_channel, channel, edf
from recordings.synthetic_breathing import periodic

RAMP = np.arange(-500, 500)

N_DAMAGED = int(os.environ.get("LAGSCAPE_DAMAGED_FILES", "200"))
"""How many damaged files to try; raise it for a long run."""


def two_channels():
    return [channel("Flow", RAMP, 100), channel("SpO2", np.repeat(RAMP[:20], 1), 2, unit="%", low="0", high="100")]


def values_of(recording, name):
    return np.concatenate([values for _, values in recording.signal(name).pieces()])


def notes_of(recording):
    return " | ".join(str(note) for note in recording.notes)


def physical(digital, low, high, digital_low=-32768, digital_high=32767):
    return low + (np.asarray(digital, float) - digital_low) * (high - low) / (digital_high - digital_low)


def test_samples_units_rates_and_start_time():
    recording = read_recording(edf(two_channels()))
    assert [(s.name, s.unit, s.kind, s.sampling_frequency_hz) for s in recording.signals] == [
        ("Flow", "L/s", "airflow", 100.0), ("SpO2", "%", "SpO2", 2.0),
    ]  # fmt: skip
    assert recording.duration_s == 10.0
    assert recording.start_clock_s == 22 * 3600 + 15 * 60 + 30
    # Tolerance: rounding of one product and one sum.
    assert values_of(recording, "Flow") == pytest.approx(physical(RAMP, -1, 1), abs=1e-12)
    assert values_of(recording, "SpO2") == pytest.approx(physical(RAMP[:20], 0, 100), abs=1e-10)


def test_patient_and_recording_fields_are_nowhere_in_what_comes_back():
    recording = read_recording(edf([*two_channels(), annotation_channel([b"+%d\x14\x14\0" % i for i in range(10)])], reserved="EDF+C"))
    assert "SECRET" not in repr(recording) and "1950" not in repr(recording)
    for signal in recording.signals:
        assert "SECRET" not in repr(signal.samples.file.header)
        # The date of the recording is not kept either.
        assert "85" not in [str(v) for v in dataclasses.astuple(signal.samples.file.header)[-2:]]
    assert "patient and recording fields were not read" in notes_of(recording)


class Counting(io.BytesIO):
    """A stream that counts the bytes taken from it, and gives them as a browser's wrapper does: as a memoryview."""

    taken = 0

    def read(self, size=-1):
        part = super().read(size)
        self.taken += len(part)
        return memoryview(part)


def test_a_window_reads_only_its_own_part_of_the_file():
    digital = np.arange(200_000) % 1000
    stream = Counting(edf([channel("Flow", digital, 100), channel("Other", digital, 100)]))
    recording = read_recording(stream)
    assert stream.taken < 3000  # twice the fixed header and the channels' own
    before = stream.taken
    (start, values), = recording.signal("Flow").pieces(1000.0, 1003.5)
    assert (start, values.size) == (1000.0, 350)
    assert values == pytest.approx(physical(digital[100_000:100_350], -1, 1), abs=1e-12)
    assert stream.taken - before == 4 * 400


def test_opening_reads_no_byte_twice_and_measuring_one_channel_reads_once():
    # A whole night is read in blocks; what it costs is what is read.
    lists = [b"+%d\x14\x14\0" % i for i in range(1800)]
    digital = (8000 * np.sin(np.arange(18_000) / 6.0)).astype(int)
    data = edf([channel("Thorax", digital, 10), channel("EEG", np.zeros(1800 * 200), 200), annotation_channel(lists)], reserved="EDF+D")
    stream = Counting(data)
    recording = read_recording(stream)
    assert stream.taken <= len(data) + 256  # the first 256 bytes are looked at twice
    before = stream.taken
    measure_breathing(recording, "Thorax")
    assert stream.taken - before <= len(data)


def test_large_data_records_are_read_by_channel():
    digital = np.arange(160_000) % 977
    recording = read_recording(edf([channel("A", digital, 40_000), channel("Flow", digital[::-1], 40_000)], duration="10"))
    (_, values), = recording.signal("Flow").pieces(9.5, 20.5)
    assert values == pytest.approx(physical(digital[::-1][38_000:82_000], -1, 1), abs=1e-12)


def test_path_bytes_and_stream_give_the_same(tmp_path):
    data = edf(two_channels())
    path = tmp_path / "night.edf"
    path.write_bytes(data)
    expected = values_of(read_recording(data), "Flow")
    assert np.array_equal(values_of(read_recording(path), "Flow"), expected)
    with path.open("rb") as stream:
        assert np.array_equal(values_of(read_recording(stream), "Flow"), expected)


# --- EDF+ ---------------------------------------------------------------------------------------------------------------


def test_annotations_and_their_times_count_from_the_first_record():
    lists = [b"+0.5\x14\x14\0" + (b"+2.5\x1530\x14Sleep stage N2\x14arousal\x14\0+1\x14Lights off\x14\0" if i == 0 else b"") for i in range(10)]
    lists = [part if i == 0 else b"+%d.5\x14\x14\0" % i for i, part in enumerate(lists)]
    recording = read_recording(edf([*two_channels(), annotation_channel(lists, 40)], reserved="EDF+C"))
    assert [(a.onset_s, a.duration_s, a.text) for a in recording.annotations] == [
        (0.5, None, "Lights off"), (2.0, 30.0, "Sleep stage N2"), (2.0, 30.0, "arousal"),
    ]  # fmt: skip
    assert recording.channel_names == ("Flow", "SpO2")


def test_discontinuous_records_become_segments():
    onsets = [0, 1, 2, 3, 10, 11, 12, 100, 101, 102]
    lists = [b"+%d\x14\x14\0" % t for t in onsets]
    recording = read_recording(edf([*two_channels(), annotation_channel(lists)], reserved="EDF+D"))
    assert [(s.start_s, s.stop_s) for s in recording.segments] == [(0.0, 4.0), (10.0, 13.0), (100.0, 103.0)]
    pieces = list(recording.signal("Flow").pieces())
    assert [(start, values.size) for start, values in pieces] == [(0.0, 400), (10.0, 300), (100.0, 300)]
    assert pieces[1][1] == pytest.approx(physical(RAMP[400:700], -1, 1), abs=1e-12)
    assert "2 gaps in time, 93.0 s in all" in notes_of(recording)


def test_discontinuous_records_out_of_order_follow_one_another():
    lists = [b"+%d\x14\x14\0" % t for t in (0, 1, 2, 1, 4, 5, 6, 7, 8, 9)]
    recording = read_recording(edf([*two_channels(), annotation_channel(lists)], reserved="EDF+D"))
    assert len(recording.segments) == 1
    assert "1 data record out of order" in notes_of(recording)


def test_discontinuous_without_annotations_is_read_as_one():
    recording = read_recording(edf(two_channels(), reserved="EDF+D"))
    assert len(recording.segments) == 1
    assert "says that it has breaks but not where" in notes_of(recording)


def test_unreadable_annotations_are_counted():
    lists = [b"+%d\x14\x14\0nonsense\0" % i for i in range(10)]
    recording = read_recording(edf([*two_channels(), annotation_channel(lists)], reserved="EDF+C"))
    assert "10 annotations left out: not readable" in notes_of(recording)


# --- wrong header fields ------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("damage", "words"),
    [
        ({"records": -1}, "number of data records is not stated; the file holds 10"),
        ({"records": 4}, "number of data records is stated as 4; the file holds 10"),
        ({"records": "ten"}, "number of data records is not stated; the file holds 10"),
        ({"header_bytes": 512}, "header's length in the file is wrong"),
        ({"header_bytes": "?"}, "header's length in the file is wrong"),
        ({"n_signals": "x"}, "number of channels in the file is wrong"),
        ({"duration": "0"}, "length of a data record is not stated; it was taken as 1 s"),
        ({"duration": "soon"}, "length of a data record is not stated; it was taken as 1 s"),
    ],
)
def test_wrong_fixed_field_is_repaired_with_a_note(damage, words):
    recording = read_recording(edf(two_channels(), **damage))
    assert words in notes_of(recording)
    assert values_of(recording, "Flow") == pytest.approx(physical(RAMP, -1, 1), abs=1e-12)


def test_decimal_comma_in_the_record_length():
    assert read_recording(edf(two_channels(), duration="0,5")).signal("Flow").sampling_frequency_hz == 200.0


def test_digital_range_the_wrong_way_round_is_turned():
    bad = channel("Flow", RAMP, 100, digital_low="32767", digital_high="-32768")
    recording = read_recording(edf([bad]))
    assert "digital range the wrong way round" in notes_of(recording)
    assert values_of(recording, "Flow") == pytest.approx(physical(RAMP, -1, 1), abs=1e-12)


def test_physical_range_the_wrong_way_round_is_a_reversed_polarity():
    recording = read_recording(edf([channel("Flow", RAMP, 100, low="1", high="-1")]))
    assert values_of(recording, "Flow") == pytest.approx(physical(RAMP, 1, -1), abs=1e-12)


@pytest.mark.parametrize(("low", "high"), [("0", "0"), ("a", "1"), ("nan", "1"), ("", "")])
def test_without_a_physical_range_values_are_digital(low, high):
    recording = read_recording(edf([channel("Flow", RAMP, 100, low=low, high=high)]))
    assert values_of(recording, "Flow").tolist() == RAMP.tolist()
    assert recording.signal("Flow").unit == "" and "in digital units" in notes_of(recording)


def test_without_a_digital_range_all_of_16_bits_is_taken():
    recording = read_recording(edf([channel("Flow", RAMP, 100, digital_low="7", digital_high="7")]))
    assert values_of(recording, "Flow") == pytest.approx(physical(RAMP, -1, 1), abs=1e-12)


def test_one_missing_sample_count_is_worked_out_from_the_length():
    damaged = two_channels()
    damaged[1]["samples"] = "?"
    recording = read_recording(edf(damaged))
    assert recording.signal("SpO2").sampling_frequency_hz == 2.0
    assert "samples of channel 2 were counted" in notes_of(recording)


def test_a_file_that_ends_within_a_record_keeps_the_whole_ones():
    recording = read_recording(edf(two_channels())[:-77])
    assert recording.duration_s == 9.0
    assert "ends within a data record" in notes_of(recording)


def test_labels_without_name_or_twice_the_same_are_told_apart():
    recording = read_recording(edf([channel("", RAMP, 100), channel("Resp", RAMP, 100), channel("Resp", RAMP, 100)]))
    assert recording.channel_names == ("channel 1", "Resp", "Resp 2")


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (lambda: edf(two_channels())[:700], "ends within the header of its 2 channels"),
        (lambda: edf(two_channels())[:900], "ends before its first whole data record"),
        (lambda: edf(two_channels(), n_signals="?", header_bytes="?"), "neither how many channels"),
        (lambda: edf([channel("Flow", RAMP, 100) | {"samples": "?"}], records=-1), "does not say how many samples channel 1 has"),
        (lambda: edf([channel("Flow", RAMP, 100) | {"samples": "0"}]), "holds no samples"),
        (lambda: edf([annotation_channel([b"+0\x14\x14\0"])], reserved="EDF+C"), "holds annotations but no signal"),
    ],
)
def test_what_cannot_be_repaired_is_refused_in_words(data, words):
    with pytest.raises(RecordingError, match=words):
        read_recording(data())


def test_a_stream_that_cannot_be_positioned_is_refused():
    class Forward(io.BytesIO):
        def seek(self, offset, whence=0):
            if whence:
                raise OSError("no")
            return super().seek(offset, whence)

    with pytest.raises(RecordingError, match="cannot be positioned"):
        read_recording(Forward(edf(two_channels())))


def test_progress_can_cancel():
    with pytest.raises(ReadCancelled, match="cancelled after"):
        read_recording(edf(two_channels()), progress=lambda done, total: False)


# --- against general libraries ------------------------------------------------------------------------------------------


def written_by_edfio(path):
    rng = np.random.default_rng(4)
    signals = [
        edfio.EdfSignal(rng.normal(size=60 * 128), 128, label="Nasal Pressure", physical_dimension="cmH2O"),
        edfio.EdfSignal(rng.uniform(80, 100, size=60), 1, label="SpO2", physical_dimension="%"),
        edfio.EdfSignal(1000 * rng.normal(size=60 * 32), 32, label="Thorax", physical_dimension="uV"),
    ]
    marks = [edfio.EdfAnnotation(3.25, 12, "Central apnoea"), edfio.EdfAnnotation(30, None, "Lights off")]
    edfio.Edf(signals, annotations=marks, starttime=datetime.time(23, 1, 2)).write(path)


def test_agrees_with_edfio_and_pyedflib(tmp_path):
    path = tmp_path / "written.edf"
    written_by_edfio(path)
    ours = read_recording(path)
    theirs = edfio.read_edf(path)
    assert ours.channel_names == tuple(signal.label for signal in theirs.signals)
    assert ours.start_clock_s == 23 * 3600 + 62
    with pyedflib.EdfReader(str(path)) as third:
        for i, (signal, other) in enumerate(zip(ours.signals, theirs.signals, strict=True)):
            assert signal.sampling_frequency_hz == other.sampling_frequency == third.getSampleFrequency(i)
            assert signal.unit == other.physical_dimension == third.getPhysicalDimension(i)
            # Tolerance: the three scale in different orders; a few roundings of the largest value.
            limit = 8 * np.finfo(float).eps * np.abs(other.data).max()
            assert np.abs(values_of(ours, signal.name) - other.data).max() <= limit
            assert np.abs(values_of(ours, signal.name) - third.readSignal(i)).max() <= 100 * limit
        onsets, durations, texts = third.readAnnotations()
    assert [(a.onset_s, a.text) for a in ours.annotations] == [(a.onset, a.text) for a in theirs.annotations]
    assert [(a.onset_s, a.text) for a in ours.annotations] == list(zip(onsets, texts, strict=True))
    assert ours.annotations[0].duration_s == theirs.annotations[0].duration == durations[0] == 12.0


def test_agrees_with_pyedflib_on_a_file_of_its_own(tmp_path):
    path = tmp_path / "written.edf"
    rng = np.random.default_rng(5)
    flow = rng.normal(size=50 * 40).round(4)
    with pyedflib.EdfWriter(str(path), 1, file_type=pyedflib.FILETYPE_EDFPLUS) as writer:
        writer.setSignalHeader(0, {"label": "Flow", "dimension": "L/s", "sample_frequency": 50, "physical_min": -5.0, "physical_max": 5.0,
                                   "digital_min": -32768, "digital_max": 32767, "transducer": "", "prefilter": ""})  # fmt: skip
        writer.writeSamples([flow])
        writer.writeAnnotation(7.5, 2.0, "arousal")
    recording = read_recording(path)
    # The other library cuts where it might round, so one whole quantisation step of 10/65535.
    assert np.abs(values_of(recording, "Flow") - flow).max() <= 10 / 65535
    assert [(a.onset_s, a.duration_s, a.text) for a in recording.annotations] == [(7.5, 2.0, "arousal")]


def test_breathing_from_edf_equals_breathing_from_text():
    truth = periodic(cycle_length_s=50.0, duty_ratio=0.6, rate_hz=10.0, duration_s=900.0)
    digital = np.round(truth.values * 5000).astype(int)
    from_edf = measure_breathing(read_recording(edf([channel("Thorax", digital, 10, low="-6.5536", high="6.5534")])), "Thorax")
    text = "Thorax\n" + "\n".join(f"{v / 5000:.6f}" for v in digital)
    from_text = measure_breathing(read_recording(text.encode(), sampling_frequency_hz=10.0), "Thorax")
    # Tolerance: single precision of the text samples.
    assert [c.start_s for c in from_edf.cycles] == pytest.approx([c.start_s for c in from_text.cycles], abs=1e-3)
    assert from_edf.duty_ratio.median == pytest.approx(from_text.duty_ratio.median, abs=1e-5)


# --- damaged files ------------------------------------------------------------------------------------------------------


def test_damaged_files_end_in_a_recording_or_a_recording_error():
    rng = np.random.default_rng(21)
    digital = (3000 * np.sin(np.arange(6000) / 5.0) * (1 + np.sin(np.arange(6000) / 60.0))).astype(int)
    lists = [b"+%d\x14\x14\0+%d\x15 1\x14mark\x14\0" % (i + (i > 60) * 40, i) for i in range(120)]
    healthy = edf([channel("Thorax", digital, 50), annotation_channel(lists)], reserved="EDF+D")
    read = refused = 0
    for _ in range(N_DAMAGED):
        data = bytearray(healthy)
        way = rng.integers(0, 4)
        if way == 0:
            del data[int(rng.integers(0, len(data))) :]
        elif way == 1:
            for place in rng.integers(8, 768, rng.integers(1, 12)):
                data[place] = int(rng.integers(0, 256))
        elif way == 2:
            at = int(rng.choice([8, 168, 176, 184, 192, 236, 244, 252, *range(256, 768, 8)]))
            word = rng.choice([b"99999999", b"-1      ", b"0       ", b"1e9     ", b"nan     ", b"        ", b"-32768  ", b"0.00001 "])
            data[at : at + 8] = word
        else:
            for place in rng.integers(768, len(data), 200):
                data[place] = int(rng.integers(0, 256))
        try:
            recording = read_recording(bytes(data))
            signal = recording.signals[0]
            (total,) = [sum(v.size for _, v in signal.pieces())]
            assert total == signal.n_samples
            measure_breathing(recording, signal.name, kind="effort")
            read += 1
        except RecordingError:
            refused += 1
    # Both ends are reached often, or the test would show nothing.
    assert read > N_DAMAGED // 8 and refused > N_DAMAGED // 8
