"""Text tables as recorders and spreadsheets write them. Every expected number is written out by hand in the test."""

import io

import numpy as np
import pytest

from lagscape.errors import RecordingError
from lagscape.recordings import ReadCancelled, read_recording
from lagscape.recordings.csv_text import BLOCK_BYTES


def column(recording, name):
    return np.concatenate([values for _, values in recording.signal(name).pieces()])


def notes_of(recording):
    return " | ".join(str(note) for note in recording.notes)


PLAIN = "time,flow\n0.0,1.5\n0.1,2.5\n0.2,-3.5\n0.3,4\n"


@pytest.mark.parametrize(
    "data",
    [
        PLAIN.encode(),
        PLAIN.replace("\n", "\r\n").encode(),
        PLAIN.replace("\n", "\r").encode(),
        PLAIN.encode("utf-8-sig"),
        PLAIN.encode("utf-16"),
        PLAIN.encode("utf-16-le"),
        PLAIN.encode("utf-16-be"),
        PLAIN.encode("utf-32"),
        PLAIN.rstrip("\n").encode(),
        PLAIN.replace(",", ";").encode(),
        PLAIN.replace(",", "\t").encode(),
        PLAIN.replace(",", " | ").encode(),
        PLAIN.replace(",", "   ").encode(),
        PLAIN.replace(",", ";").replace(".", ",").encode(),
        PLAIN.replace(",", "\t").replace(".", ",").encode(),
        ('"' + PLAIN.strip().replace(",", '","').replace("\n", '"\n"') + '"\n').encode(),
        ("# a comment\n" + PLAIN.replace("0.1,2.5\n", "0.1,2.5\n# another\n\n")).encode(),
        ("Some recorder\nPatient position: supine\n\n" + PLAIN).encode(),
        PLAIN.replace("time,flow", "# time, flow").encode(),
    ],
    ids=["plain", "crlf", "cr", "utf8-mark", "utf16-mark", "utf16-le", "utf16-be", "utf32", "no-last-newline", "semicolon", "tab", "bar",
         "blanks", "decimal-comma-semicolon", "decimal-comma-tab", "quoted", "comments", "preamble", "commented-header"],
)  # fmt: skip
def test_one_table_in_many_dresses(data):
    recording = read_recording(data)
    assert recording.channel_names == ("flow",)
    assert recording.signal("flow").sampling_frequency_hz == 10.0
    assert column(recording, "flow").tolist() == [1.5, 2.5, -3.5, 4.0]


def test_quoted_decimal_commas_between_commas():
    recording = read_recording(b'a,b\n"1,5","2,25"\n"1,75","-2,5"\n', sampling_frequency_hz=4)
    assert column(recording, "a").tolist() == [1.5, 1.75]
    assert column(recording, "b").tolist() == [2.25, -2.5]


def test_no_header_and_a_time_column():
    recording = read_recording(b"0,5\n0.5,6\n1.0,7\n1.5,9\n")
    assert recording.channel_names == ("channel 2",)
    assert recording.signal("channel 2").sampling_frequency_hz == 2.0
    assert "first column rises evenly" in notes_of(recording)


def test_one_column_with_the_rate_given():
    recording = read_recording(b"Effort\n1\n2\n4\n", sampling_frequency_hz=25)
    assert column(recording, "Effort").tolist() == [1.0, 2.0, 4.0]
    assert recording.duration_s == pytest.approx(3 / 25)


def test_one_column_of_decimal_commas():
    assert column(read_recording(b"Effort\n1,5\n2,5\n4,5\n", sampling_frequency_hz=25), "Effort").tolist() == [1.5, 2.5, 4.5]


def test_one_column_with_the_rate_in_the_lines_above():
    recording = read_recording(b"Sampling rate: 12,5 Hz\nEffort\n1\n2\n4\n")
    assert recording.signal("Effort").sampling_frequency_hz == 12.5
    assert "12.5 Hz" in notes_of(recording)


def test_units_in_brackets_in_names_and_in_a_line_of_their_own():
    first = read_recording(b"Time [s];Flow (L/s);SpO2_percent\n0;1;97\n1;2;96\n2;3;95\n")
    assert [(s.name, s.unit, s.kind) for s in first.signals] == [("Flow", "L/s", "airflow"), ("SpO2_percent", "%", "SpO2")]
    second = read_recording(b"Time,Flow,EtCO2\ns,L/min,mmHg\n0,1,40\n1,2,41\n2,3,42\n")
    assert [(s.name, s.unit, s.kind) for s in second.signals] == [("Flow", "L/min", "airflow"), ("EtCO2", "mmHg", "CO2")]


@pytest.mark.parametrize(
    ("header", "step", "rate"), [("time_ms", 40, 25.0), ("Time [min]", 0.001, 1 / 0.06), ("time", 40, 25.0), ("time_s", 0.04, 25.0)]
)
def test_units_of_time(header, step, rate):
    rows = "".join(f"{i * step:.6f},{i % 7}\n" for i in range(50))
    recording = read_recording(f"{header},flow\n{rows}".encode())
    # Tolerance: times are written to six decimals.
    assert recording.signal("flow").sampling_frequency_hz == pytest.approx(rate, rel=1e-4)


def test_clock_times_run_on_over_midnight():
    rows = ["23:59:59.5,1", "23:59:59.75,2", "00:00:00.0,3", "00:00:00.25,4"]
    recording = read_recording(("clock,flow\n" + "\n".join(rows)).encode())
    assert recording.signal("flow").sampling_frequency_hz == 4.0
    assert len(recording.segments) == 1
    assert recording.start_clock_s == 86399.5


@pytest.mark.parametrize("form", ["2024-03-31 {}", "2024-03-31T{}", "31.03.2024 {}", "03/31/2024 {}", "2024-03-31T{}Z", "{} PM"])
def test_date_times_in_several_forms(form):
    rows = "\n".join(f"{form.format(f'09:15:0{i}')};{i}" for i in range(6))
    recording = read_recording(f"timestamp;flow\n{rows}\n".encode())
    assert recording.signal("flow").sampling_frequency_hz == 1.0
    assert column(recording, "flow").tolist() == [0, 1, 2, 3, 4, 5]


def test_iso_dates_tell_a_gap_of_more_than_a_day():
    rows = [f"2024-03-0{day} 22:00:{i:02d},1" for day in (1, 3) for i in range(30)]
    recording = read_recording(("time,flow\n" + "\n".join(rows)).encode())
    assert [segment.start_s for segment in recording.segments] == [0.0, 2 * 86400.0]


def test_times_coarser_than_the_samples():
    # Ten samples share each written second.
    rows = "".join(f"{i // 10},{i}\n" for i in range(200))
    recording = read_recording(f"time,flow\n{rows}".encode())
    assert recording.signal("flow").sampling_frequency_hz == pytest.approx(10.0, rel=0.01)  # one sample in 200
    assert len(recording.segments) == 1
    assert "more coarsely" in notes_of(recording)


def test_times_rounded_to_a_millisecond_keep_the_rate_of_the_whole():
    rows = "".join(f"{i / 256:.3f},{i % 5}\n" for i in range(2000))
    recording = read_recording(f"time,flow\n{rows}".encode())
    assert recording.signal("flow").sampling_frequency_hz == 256.0
    assert column(recording, "flow").size == 2000


def test_a_gap_makes_two_segments():
    rows = "".join(f"{(i if i < 100 else i + 300) / 10:.1f},{i}\n" for i in range(200))
    recording = read_recording(f"time,flow\n{rows}".encode())
    assert [(s.start_s, s.stop_s) for s in recording.segments] == [(0.0, 10.0), (40.0, 50.0)]
    assert "1 gap in time, 30.0 s in all" in notes_of(recording)
    pieces = list(recording.signal("flow").pieces(5.0, 45.0))
    assert [(start, values.size, values[0]) for start, values in pieces] == [(5.0, 50, 50.0), (40.0, 50, 100.0)]


def test_a_missing_sample_is_filled_in_between():
    rows = "".join(f"{i / 10:.1f},{i}\n" for i in range(100) if i != 50)
    recording = read_recording(f"time,flow\n{rows}".encode())
    assert len(recording.segments) == 1
    assert column(recording, "flow").tolist() == pytest.approx(list(range(100)), abs=1e-4)  # single precision of 100
    assert "1 break of up to 1 s filled in" in notes_of(recording)


def test_values_once_a_breath_are_laid_on_an_even_grid():
    rng = np.random.default_rng(0)
    times = np.cumsum(rng.uniform(2.0, 6.0, 100))
    rows = "".join(f"{t:.2f},{np.sin(t / 20.0):.5f}\n" for t in times)
    recording = read_recording(f"time,ventilation\n{rows}".encode())
    (start, values), = recording.signal("ventilation").pieces()
    at = times[0] + start + np.arange(values.size) / recording.signal("ventilation").sampling_frequency_hz
    # Straight lines between samples at most 6 s apart on a sine of 20 s per radian: (6/20)^2 / 8 = 0.011.
    assert np.abs(values - np.sin(at / 20.0)).max() < 0.012
    assert "unevenly spaced" in notes_of(recording)


def test_damaged_fields_are_counted_with_their_first_line():
    data = b"time,flow\n0,1\n0.1,x\n0.2,3 L\n0.3,\n0.4,5,6\n0.5\n0.6,1e-3\n0.7,y\n"
    recording = read_recording(data)
    expected = [1.0, np.nan, 3.0, np.nan, 5.0, np.nan, np.float32(1e-3), np.nan]
    assert np.array_equal(column(recording, "flow"), np.array(expected, dtype=float), equal_nan=True)
    told = [str(note) for note in recording.notes]
    assert "2 values of 'flow' left out: no number ('x') (first in line 3)" in told
    assert "1 value of 'flow' with text behind the number ('3 L'); the number was kept (first in line 4)" in told
    assert "2 values of 'flow' missing (first in line 5)" in told
    assert "1 line with too many columns; the surplus was left out (first in line 6)" in told
    assert "1 line with too few columns; what was there was kept (first in line 7)" in told


def test_a_damaged_first_line_of_numbers_is_not_taken_for_the_names():
    recording = read_recording(b"clock;stage;flow\n22:00:00,0;N;artefact\n22:00:00,5;N1;0,25\n22:00:01,0;N1;0,5\n22:00:01,5;N1;0,75\n")
    assert recording.channel_names == ("flow",)
    assert np.array_equal(column(recording, "flow"), [np.nan, 0.25, 0.5, 0.75], equal_nan=True)


def test_lines_out_of_order_are_left_out():
    rows = [f"{i / 10:.1f},{i}" for i in range(100)]
    rows[40], rows[41] = rows[41], rows[40]
    recording = read_recording(("time,flow\n" + "\n".join(rows)).encode())
    assert "1 line left out: time runs backwards" in notes_of(recording)
    assert "first at 4.1 s" in notes_of(recording)


def test_columns_of_text_are_left_out_and_named():
    recording = read_recording(b"time,stage,flow\n0,N1,1\n1,N2,2\n2,N2,3\n")
    assert recording.channel_names == ("flow",)
    assert "columns without numbers were left out: 'stage'" in notes_of(recording)


def test_a_column_of_sample_numbers_is_no_signal():
    recording = read_recording(b"sample,flow\n0,1\n1,2\n2,3\n", sampling_frequency_hz=10)
    assert recording.channel_names == ("flow",)


def test_double_and_empty_names_are_told_apart():
    recording = read_recording(b"time,flow,flow,\n0,1,2,3\n1,4,5,6\n2,4,5,6\n")
    assert recording.channel_names == ("flow", "flow 2", "channel 4")


def test_path_bytes_and_stream_give_the_same(tmp_path):
    path = tmp_path / "night.csv"
    path.write_bytes(PLAIN.encode())
    from_path = read_recording(path)
    with path.open("rb") as stream:
        from_stream = read_recording(stream)
        assert not stream.closed
    assert from_path.name == from_stream.name == "night.csv"
    assert column(from_path, "flow").tolist() == column(from_stream, "flow").tolist() == column(read_recording(PLAIN.encode()), "flow").tolist()


class _Unseekable(io.RawIOBase):
    """A stream that gives what it likes, in odd portions, and cannot say how long it is."""

    def __init__(self, data):
        self.data, self.at = data, 0

    def read(self, size=-1):
        part = self.data[self.at : self.at + 1013]
        self.at += len(part)
        return part

    def tell(self):
        raise OSError("no position")


def test_a_stream_in_odd_portions_gives_the_same():
    data = "time;flow\r\n" + "".join(f"{i / 8:.3f};{np.sin(i):.4f}\r\n" for i in range(4000))
    whole = read_recording(data.encode())
    for encoding in ("utf-8", "utf-16"):
        parts = read_recording(_Unseekable(data.encode(encoding)))
        assert column(parts, "flow").tolist() == column(whole, "flow").tolist()
        assert column(parts, "flow").size == 4000


def test_many_blocks_join_without_a_seam():
    n = 2 * BLOCK_BYTES // 12
    text = b"t,v\n" + b"".join(b"%.2f,%d\n" % (i / 100, i % 1000) for i in range(n))
    assert len(text) > 1.5 * BLOCK_BYTES
    steps = []
    recording = read_recording(io.BytesIO(text), progress=lambda done, total: steps.append((done, total)))
    assert np.array_equal(column(recording, "v"), np.arange(n) % 1000)
    assert steps[-1] == (len(text), len(text)) and len(steps) >= 2


def test_progress_can_cancel():
    with pytest.raises(ReadCancelled, match="cancelled after"):
        read_recording(PLAIN.encode(), progress=lambda done, total: False)


def test_an_unknown_channel_is_answered_with_those_there_are():
    recording = read_recording(b"time,Airflow,SpO2\n0,1,97\n1,2,96\n2,1,97\n")
    with pytest.raises(RecordingError, match=r"no channel 'Flow'; the file has: 'Airflow', 'SpO2'"):
        recording.signal("Flow")
    assert recording.signal(" airflow ").name == "Airflow"
