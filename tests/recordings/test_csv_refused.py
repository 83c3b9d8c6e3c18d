"""What cannot be read is refused in words, and nothing a stranger's file holds ends in anything but RecordingError."""

import io
import os

import numpy as np
import pytest

from lagscape.errors import RecordingError
from lagscape.recordings import measure_breathing, read_recording

N_DAMAGED = int(os.environ.get("LAGSCAPE_DAMAGED_FILES", "200"))
"""How many damaged files to try; raise it for a long run."""


@pytest.mark.parametrize(
    ("data", "words"),
    [
        (b"", "the file is empty"),
        (b"\n\n \n", "no line of numbers was found"),
        (b"hello\nworld\n", "no line of numbers was found; the file starts with 'hello'"),
        (bytes(range(256)) * 8, "not text: it holds binary bytes"),
        (b"PK\x03\x04" + b"x" * 50, "a spreadsheet or a zip archive; save the sheet as CSV"),
        (b"%PDF-1.7 ...", "a PDF document"),
        (b"\x1f\x8b\x08" + b"x" * 50, "compressed; unpack it first"),
        (b"1\n2\n3\n", r"no time column and states no sampling rate; give the rate.*sampling_frequency_hz=25"),
        (b"flow\n1\n", "holds 1 line of numbers"),
        (b"time,stage\n0,a\n1,b\n2,c\n", "holds a time column but no column of numbers beside it"),
        (b"clock,stage\n10:00:00,a\n10:00:01,b\n", "holds no column of numbers"),
        (b"time,flow\n5,1\n5,2\n5,3\n5,4\n", "the time column never changes"),
        (b"time,flow\n" + b"".join(b"%d,1\n" % (i * 7 % 50) for i in range(50)), "time column runs backwards in"),
        (b"a,b\n1,5,2,5\n1,6,2,6\n", "2 names stand over 4 numbers a line"),
        (b"time,flow\n" + b"".join(b"%.6f,1\n%.6f,2\n%.6f,3\n" % (i, i + 1e-4, i + 2.5e-4) for i in range(50)), "too uneven"),
        (b"time,flow\n" + b"".join(b"%de-9,2\n" % i for i in range(50)), "steps by 1e-09 s, more than 100,000 samples a second"),
    ],
    ids=["empty", "blank", "words", "binary", "zip", "pdf", "gzip", "no-rate", "one-line", "time-only", "text-only", "still-time",
         "backwards", "comma-comma", "uneven", "nanoseconds"],
)  # fmt: skip
def test_refused_in_words(data, words):
    with pytest.raises(RecordingError, match=words):
        read_recording(data)


def test_arguments_are_checked():
    with pytest.raises(RecordingError, match=r"sampling_frequency_hz must be over 0 and at most 1e5 \(Hz\), got -1"):
        read_recording(b"1\n2\n", sampling_frequency_hz=-1)
    with pytest.raises(RecordingError, match="no time column 'tid'; the file has: 'time', 'flow'"):
        read_recording(b"time,flow\n0,1\n1,2\n", time_column="tid")
    with pytest.raises(RecordingError, match="time unit must be one of s, ms, us, min, h, got 'fortnight'"):
        read_recording(b"time,flow\n0,1\n1,2\n", time_unit="fortnight")
    with pytest.raises(RecordingError, match="must be a path, bytes or a binary file, got int"):
        read_recording(7)
    with pytest.raises(RecordingError, match="must be opened in binary mode, its read"):
        read_recording(io.StringIO("time,flow\n0,1\n"))
    with pytest.raises(RecordingError, match=r"cannot open 'absent\.csv': No such file"):
        read_recording("/nowhere/absent.csv")


def test_a_line_without_end_is_refused_before_memory_runs_out():
    class Endless(io.RawIOBase):
        def read(self, size=-1):
            return b"1" * size

    with pytest.raises(RecordingError, match="a line is longer than 16 MB"):
        read_recording(Endless())


def _healthy():
    rows = "".join(f"{i / 5:.1f};{np.sin(i / 3.0) * (1 + np.sin(i / 50.0)):.3f};{97 - i % 4}\n" for i in range(600))
    return ("time;effort (a.u.);SpO2\n" + rows).encode()


def _damaged(rng, data):
    """One way of damage after another: cut, flipped, doubled, shuffled, sprinkled."""
    data = bytearray(data)
    for _ in range(rng.integers(1, 4)):
        way = rng.integers(0, 8)
        at = int(rng.integers(0, max(len(data), 1)))
        if way == 0:
            data = data[:at]
        elif way == 1:
            for place in rng.integers(0, max(len(data), 1), 30):
                if len(data):
                    data[place % len(data)] = int(rng.integers(0, 256))
        elif way == 2:
            data[at:at] = data[at : at + 2000]
        elif way == 3:
            lines = bytes(data).split(b"\n")
            rng.shuffle(lines)
            data = bytearray(b"\n".join(lines))
        elif way == 4:
            data = data.replace(b";", [b",", b"\t", b";;", b"", b'";"'][rng.integers(0, 5)])
        elif way == 5:
            data = data.replace(b".", [b",", b"..", b"e", b"", b"-"][rng.integers(0, 5)])
        elif way == 6:
            word = [b"NaN", b'"', b"\x00", b"1e999", b"-", b"\xff\xfe", b"9" * 400, b"12:61:00", b"\r", b"#"][rng.integers(0, 10)]
            for place in sorted(rng.integers(0, max(len(data), 1), 20), reverse=True):
                data[place:place] = word
        else:
            del data[at : at + int(rng.integers(1, 500))]
    return bytes(data)


def test_damaged_tables_end_in_a_recording_or_a_recording_error():
    rng = np.random.default_rng(20)
    healthy = _healthy()
    read = refused = 0
    for _ in range(N_DAMAGED):
        try:
            recording = read_recording(_damaged(rng, healthy))
            for signal in recording.signals:
                assert signal.n_samples == sum(values.size for _, values in signal.pieces())
            measure_breathing(recording, recording.signals[0].name, kind="effort")
            read += 1
        except RecordingError:
            refused += 1
    # Both ends are reached often, or the test would show nothing.
    assert read > N_DAMAGED // 8 and refused > N_DAMAGED // 8
