"""EDF files byte by byte, after the published layout, so that any field can be made wrong."""

import numpy as np

FIELDS = ("label", "transducer", "unit", "low", "high", "digital_low", "digital_high", "filter", "samples", "reserved")
WIDTHS = dict(zip(FIELDS, (16, 80, 8, 8, 8, 8, 8, 80, 8, 32), strict=True))


def channel(label, digital, samples, *, unit="L/s", low="-1", high="1", digital_low="-32768", digital_high="32767"):
    """A channel's header fields and its digital samples (int16, a whole number of data records)."""
    return {
        "label": label, "transducer": "", "unit": unit, "low": low, "high": high, "digital_low": digital_low,
        "digital_high": digital_high, "filter": "", "samples": str(samples), "reserved": "",
        "digital": np.asarray(digital, dtype="<i2"), "n": samples,
    }  # fmt: skip


def annotation_channel(lists, samples=30):
    """An annotation channel: one bytes object of time-stamped lists for each data record."""
    data = b"".join(part.ljust(2 * samples, b"\0") for part in lists)
    return channel("EDF Annotations", np.frombuffer(data, dtype="<i2"), samples, unit="")


def edf(channels, *, reserved="", records=None, duration="1", n_signals=None, header_bytes=None, version="0", start_time="22.15.30"):
    """The bytes of an EDF file. Patient and recording fields hold a tell-tale that must never be seen again."""
    n_records = channels[0]["digital"].size // channels[0]["n"]

    def field(text, width):
        return str(text).encode("latin-1").ljust(width)[:width]

    head = field(version, 8) + field("SECRET-PATIENT 1.1.1950", 80) + field("SECRET-RECORDING", 80) + field("01.02.85", 8)
    head += field(start_time, 8) + field(256 * (len(channels) + 1) if header_bytes is None else header_bytes, 8)
    head += field(reserved, 44) + field(n_records if records is None else records, 8) + field(duration, 8)
    head += field(len(channels) if n_signals is None else n_signals, 4)
    for name in FIELDS:
        head += b"".join(field(c[name], WIDTHS[name]) for c in channels)
    body = b"".join(
        b"".join(c["digital"][i * c["n"] : (i + 1) * c["n"]].tobytes() for c in channels) for i in range(n_records)
    )
    return head + body
