"""Tables. Oracle: the csv module of the standard library reads them back, float() to the last bit (RFC 4180)."""

import csv
import io

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from lagscape.errors import InvalidInputError
from lagscape.handover.table import breaths_csv, cycles_csv, table_csv, trace_csv
from lagscape.loops.protocol import Signal
from lagscape.recordings.breathing import measure_breathing
from lagscape.recordings.reading import read_recording

FLOATS = st.floats(allow_nan=False, allow_infinity=False)


def rows_of(text: str) -> list[list[str]]:
    return list(csv.reader(io.StringIO(text, newline="")))


@given(st.lists(st.tuples(FLOATS, FLOATS), min_size=1, max_size=30))
def test_a_trace_comes_back_to_the_last_bit(pairs):
    times, values = np.array([pair[0] for pair in pairs]), np.array([pair[1] for pair in pairs])
    signals = (Signal("ventilation", "Ventilation", "L/min", values), Signal("level", "Level", "", values))
    header, *rows = rows_of(trace_csv(times, signals))
    assert header == ["time_s", "ventilation_l_min", "level"]
    assert [[float(cell).hex() for cell in row] for row in rows] == [
        [float(time).hex(), float(value).hex(), float(value).hex()] for time, value in pairs
    ]


def test_lines_end_as_the_standard_says_and_words_are_quoted():
    assert table_csv(["a", "b"], [[1.5, 'so "so", he said'], [None, True], [float("nan"), np.int64(3)]]) == (
        'a,b\r\n1.5,"so ""so"", he said"\r\n,yes\r\n,3\r\n'
    )


def test_a_signal_of_another_length_is_refused():
    with pytest.raises(InvalidInputError, match="The signal level must have 2 values, one a time; got 3"):
        trace_csv(np.zeros(2), [Signal("level", "Level", "", np.zeros(3))])


def effort(waning: bool) -> bytes:
    times = np.arange(0.0, 900.0, 0.1)
    envelope = np.clip(np.cos(2.0 * np.pi * times / 60.0) + 0.5, 0.0, None) if waning else np.ones_like(times)
    return ("effort\n" + "\n".join(f"{value:.5f}" for value in envelope * np.sin(2.0 * np.pi * 0.25 * times))).encode()


def test_cycles_are_rows_with_units_in_the_headers():
    measured = measure_breathing(read_recording(effort(True), sampling_frequency_hz=10.0), "effort").without({2})
    header, *rows = rows_of(cycles_csv(measured))
    assert len(rows) == len(measured.cycles) > 10
    assert {"start_s", "cycle_length_s", "duty_ratio", "loop_gain", "excluded", "reason"} <= set(header)
    table = [dict(zip(header, row, strict=True)) for row in rows]
    for cycle, row in zip(measured.cycles, table, strict=True):
        assert float(row["start_s"]) == cycle.start_s and float(row["cycle_length_s"]) == cycle.cycle_length_s
        assert row["excluded"] == ("yes" if cycle.excluded else "no")
    assert table[1]["excluded"] == "yes" and table[1]["reason"] == "by hand"


def test_a_recording_without_cycles_is_a_header():
    measured = measure_breathing(read_recording(effort(False), sampling_frequency_hz=10.0), "effort")
    assert measured.cycles == ()
    assert len(rows_of(cycles_csv(measured))) == 1


def test_breaths_are_rows_with_units_in_the_headers_and_every_digit():
    text = effort(True).decode().replace("effort", "volume (L)", 1)
    measured = measure_breathing(read_recording(text.encode(), sampling_frequency_hz=10.0), "volume")
    header, *rows = rows_of(breaths_csv(measured))
    assert header == [
        "number", "start_s", "inspiration_end_s", "end_s", "rate_per_min", "tidal_volume_l", "ventilation_l_min", "followed_by", "quality",
    ]  # fmt: skip
    table = measured.breath_table
    assert len(rows) == len(table) > 100
    columns = list(zip(*rows, strict=True))
    wanted = (table.start_s, table.inspiration_end_s, table.end_s, table.rates_per_min, table.tidal_volumes, table.ventilations)
    for column, values in zip(columns[1:7], wanted, strict=True):
        assert [float(cell).hex() for cell in column] == [float(value).hex() for value in values]
    assert set(columns[7]) == {"breath", "pause", "break"}


def test_a_signal_without_single_breaths_is_a_header():
    text = "ventilation\n" + "\n".join(f"{8.0 + np.sin(k / 20.0):.4f}" for k in range(1200))
    measured = measure_breathing(read_recording(text.encode(), sampling_frequency_hz=4.0), "ventilation")
    assert len(rows_of(breaths_csv(measured))) == 1
