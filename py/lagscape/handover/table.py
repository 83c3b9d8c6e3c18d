"""Tables for other programs: CSV (RFC 4180) of a trace and of a measurement's cycles and breaths. Units in the headers, every digit kept."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from typing import Any

from lagscape.errors import InvalidInputError
from lagscape.handover.measurement import breath_records, cycle_record
from lagscape.handover.plain_values import unit_suffix
from lagscape.loops.protocol import Signal
from lagscape.recordings.breathing_result import BreathingMeasurement

__all__ = ["breaths_csv", "cycles_csv", "table_csv", "trace_csv"]


def trace_csv(times: Any, signals: Sequence[Signal]) -> str:
    """A trace as CSV: `time_s`, then each signal under its name and unit, such as `ventilation_l_min`.

    Parameters
    ----------
    times : array, shape (n,)
        s.
    signals : sequence of Signal
        Values of shape (n,).

    Raises
    ------
    InvalidInputError
        If a signal has another length than the times.
    """
    for signal in signals:
        if len(signal.values) != len(times):
            raise InvalidInputError(f"The signal {signal.name} must have {len(times)} values, one a time; got {len(signal.values)}.")
    columns = [signal.name + unit_suffix(signal.unit) for signal in signals]
    return table_csv(["time_s", *columns], zip(times, *(signal.values for signal in signals), strict=True))


def cycles_csv(measurement: BreathingMeasurement) -> str:
    """A measurement's cycles as CSV, one row each in time order, excluded ones with their reason; only the header where there are none."""
    records = [cycle_record(cycle) for cycle in measurement.cycles]
    columns = list(records[0]) if records else ["number", "start_s", "ventilation_end_s", "stop_s", "cycle_length_s"]
    peak = "peak" + unit_suffix(measurement.unit)
    return table_csv([peak if name == "peak" else name for name in columns], (list(record.values()) for record in records))


def breaths_csv(measurement: BreathingMeasurement) -> str:
    """A measurement's single breaths as CSV, one row each in time order; only the header where there are none.

    What may not be claimed of a channel, such as the volume of a thermistor's breaths, is an empty cell.
    """
    records = breath_records(measurement.breath_table)
    columns = list(records[0]) if records else ["number", "start_s", "inspiration_end_s", "end_s", "rate_per_min"]
    return table_csv(columns, (list(record.values()) for record in records))


def table_csv(columns: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    """A header and rows as RFC 4180 text: floats with as many digits as bring back the same bits, nothing for None."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\r\n")
    writer.writerow(columns)
    writer.writerows([_cell(value) for value in row] for row in rows)
    return out.getvalue()


def _cell(value: Any) -> str:
    value = value.item() if hasattr(value, "item") else value
    if value is None or value != value:
        return ""
    if isinstance(value, bool):
        return "yes" if value else "no"
    return repr(value) if isinstance(value, float) else str(value)
