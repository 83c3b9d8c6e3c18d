"""The header of an EDF or EDF+ file, field by field, repaired where it is wrong.

Layout after Kemp et al. 1992 (Electroencephalogr Clin Neurophysiol 82:391-393) and Kemp & Olivan 2003 (Clin Neurophysiol
114:1755-1761). The 160 bytes that hold the patient and the recording, and the start date, are stepped over: nobody's name,
number or birthday ever enters the program.
"""

import math
import re
from dataclasses import dataclass

from lagscape.errors import RecordingError
from lagscape.recordings.recording import Note, counted, one_line

__all__ = ["ANNOTATION_LABEL", "EdfChannel", "EdfHeader", "looks_like_edf", "read_header", "signal_count"]

FIXED_BYTES = 256
CHANNEL_BYTES = 256
ANNOTATION_LABEL = "EDF Annotations"
_MOST_CHANNELS = 9999
_HIGHEST_RATE_HZ = 1e5

# Field widths of the per-channel part, in file order.
_WIDTHS = (16, 80, 8, 8, 8, 8, 8, 80, 8, 32)


@dataclass(frozen=True)
class EdfChannel:
    """One channel: physical value = offset + gain * digital; its samples lie at `first_byte` of every data record."""

    label: str
    unit: str
    gain: float
    offset: float
    samples_per_record: int
    first_byte: int

    @property
    def is_annotation(self) -> bool:
        return self.label == ANNOTATION_LABEL


@dataclass(frozen=True)
class EdfHeader:
    """What is needed to find a sample. `continuity` is '' (EDF), 'C' or 'D' (EDF+ without and with breaks)."""

    channels: tuple[EdfChannel, ...]
    header_bytes: int
    record_bytes: int
    n_records: int
    record_duration_s: float
    continuity: str
    start_clock_s: float | None


def looks_like_edf(head: bytes) -> bool:
    """Whether a file that starts with these (at least 256) bytes is EDF, perhaps with a damaged field or two."""
    if len(head) < FIXED_BYTES or head[:1] != b"0" or re.search(rb"[\r\n]", head[:FIXED_BYTES]):
        return False
    signs = (
        head[:8] == b"0       ",
        re.fullmatch(rb"\d\d[.:/-]\d\d[.:/-]\d\d", head[168:176]) is not None,
        re.fullmatch(rb"\d\d[.:/-]\d\d[.:/-]\d\d", head[176:184]) is not None,
        re.fullmatch(rb"\d+ *", head[184:192]) is not None,
        re.fullmatch(rb"-?\d+ *", head[236:244]) is not None,
        re.fullmatch(rb"\d+ *", head[252:256]) is not None,
    )
    return sum(signs) >= 3


def signal_count(fixed: bytes, notes: list[Note]) -> int:
    """Number of channels from the first 256 bytes; from the header's length where the field itself is broken.

    Raises
    ------
    RecordingError
        If neither tells.
    """
    stated = _whole(fixed[252:256])
    by_length = _whole(fixed[184:192])
    implied = by_length // CHANNEL_BYTES - 1 if by_length is not None and by_length % CHANNEL_BYTES == 0 else None
    if stated is not None and 1 <= stated <= _MOST_CHANNELS:
        if implied != stated:
            notes.append(Note("the header's length in the file is wrong; it was worked out from the number of channels"))
        return stated
    if implied is not None and 1 <= implied <= _MOST_CHANNELS:
        notes.append(Note("the number of channels in the file is wrong; it was worked out from the header's length"))
        return implied
    raise RecordingError("the EDF header states neither how many channels it has nor how long it is; the file cannot be read")


def read_header(fixed: bytes, channels: bytes, n_channels: int, file_bytes: int, notes: list[Note]) -> EdfHeader:
    """Judge a header: its first 256 bytes, then 256 bytes a channel.

    Raises
    ------
    RecordingError
        If the file ends within the header, its records cannot be laid out, or it holds no whole data record.
    """
    if len(channels) < n_channels * CHANNEL_BYTES:
        raise RecordingError(f"the file ends within the header of its {counted(n_channels, 'channel')}")
    fields = _channel_fields(channels, n_channels)
    header_bytes = FIXED_BYTES + n_channels * CHANNEL_BYTES
    stated_records = _whole(fixed[236:244])
    sizes = _samples_per_record([f[8] for f in fields], file_bytes - header_bytes, stated_records, notes)
    record_bytes = 2 * sum(sizes)
    n_records = _record_count(file_bytes - header_bytes, record_bytes, stated_records, notes)
    duration = _number(fixed[244:252])
    only_annotations = all(_text(f[0]) == ANNOTATION_LABEL for f in fields)
    if duration is None or duration < 0.0 or (duration == 0.0 and not only_annotations):
        notes.append(Note("the length of a data record is not stated; it was taken as 1 s"))
        duration = 1.0
    result, at = [], 0
    for f, size in zip(fields, sizes, strict=True):
        label = _text(f[0])
        gain, offset, unit = (1.0, 0.0, "") if label == ANNOTATION_LABEL else _scale(f, label, notes)
        result.append(EdfChannel(label, unit, gain, offset, size, at))
        at += 2 * size
    reserved = fixed[192:236]
    continuity = "D" if reserved.startswith(b"EDF+D") else "C" if reserved.startswith(b"EDF+C") else ""
    return EdfHeader(tuple(result), header_bytes, record_bytes, n_records, duration or 1.0, continuity, _clock(fixed[176:184]))


def _channel_fields(channels: bytes, n: int) -> list[list[bytes]]:
    fields: list[list[bytes]] = [[] for _ in range(n)]
    at = 0
    for width in _WIDTHS:
        for field in fields:
            field.append(channels[at : at + width])
            at += width
    return fields


def _samples_per_record(raw: list[bytes], data_bytes: int, n_records: int | None, notes: list[Note]) -> list[int]:
    sizes = [_whole(field) for field in raw]
    broken = [i for i, size in enumerate(sizes) if size is None or size < 0]
    known = sum(size for size in sizes if size is not None and size > 0)
    if len(broken) == 1 and n_records is not None and n_records > 0:
        # One size missing: the file's length tells it.
        left, rest = divmod(data_bytes // 2, n_records)
        if rest == 0 and left > known:
            sizes[broken[0]] = left - known
            notes.append(Note(f"the samples of channel {broken[0] + 1} were counted from the length of the file"))
            broken = []
    if broken:
        raise RecordingError(f"the EDF header does not say how many samples channel {broken[0] + 1} has; the file cannot be read")
    if not known:
        raise RecordingError("the EDF file holds no samples")
    return [int(size or 0) for size in sizes]


def _record_count(data_bytes: int, record_bytes: int, stated: int | None, notes: list[Note]) -> int:
    held, over = divmod(max(data_bytes, 0), record_bytes)
    if held == 0:
        raise RecordingError("the EDF file ends before its first whole data record")
    if stated != held:
        what = "not stated" if stated is None or stated < 0 else f"stated as {stated}"
        notes.append(Note(f"the number of data records is {what}; the file holds {held}"))
    if over:
        notes.append(Note("the file ends within a data record; that part was left out"))
    return held


def _scale(f: list[bytes], label: str, notes: list[Note]) -> tuple[float, float, str]:
    """Gain, offset and unit of a channel; digital units where the header makes no sense."""
    name, unit = one_line(label) or "a channel without a name", one_line(_text(f[2]), 8)
    low, high = _number(f[3]), _number(f[4])
    digital_low, digital_high = _number(f[5]), _number(f[6])
    if digital_low is None or digital_high is None or digital_low == digital_high:
        notes.append(Note(f"'{name}' states no range of digital values; it was taken as -32768 to 32767"))
        digital_low, digital_high = -32768.0, 32767.0
    elif digital_low > digital_high:
        notes.append(Note(f"'{name}' states its digital range the wrong way round; it was turned"))
        digital_low, digital_high = digital_high, digital_low
    if low is None or high is None or low == high:
        notes.append(Note(f"'{name}' states no physical range; its values are in digital units"))
        return 1.0, 0.0, ""
    gain = (high - low) / (digital_high - digital_low)
    return gain, low - gain * digital_low, unit


def _text(field: bytes) -> str:
    return field.decode("latin-1").strip(" \0")


def _number(field: bytes) -> float | None:
    try:
        value = float(_text(field).replace(",", "."))
    except ValueError:
        return None
    return value if math.isfinite(value) and abs(value) < 1e30 else None


def _whole(field: bytes) -> int | None:
    value = _number(field)
    return int(value) if value is not None and value == int(value) else None


def _clock(field: bytes) -> float | None:
    found = re.fullmatch(r"(\d\d)[.:/-](\d\d)[.:/-](\d\d)", _text(field))
    if found is None:
        return None
    hour, minute, second = (int(part) for part in found.groups())
    return hour * 3600.0 + minute * 60.0 + second if hour < 24 and minute < 60 and second < 60 else None
