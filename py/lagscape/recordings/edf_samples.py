"""Samples of an EDF file, read by slices.

Data records hold all channels in turn, so that one channel costs a reading of the whole file. A channel that was read whole is
kept as the file's own 16-bit numbers: a tenth of a night with ten channels.
"""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, field
from typing import BinaryIO

import numpy as np

from lagscape.recordings.byte_source import ByteSource
from lagscape.recordings.edf_header import EdfChannel, EdfHeader
from lagscape.recordings.stepwise import Steps

__all__ = ["EdfFile", "EdfSamples"]

_BLOCK_BYTES = 8 << 20
_LARGE_RECORD = 1 << 16
_MOST_KEPT_BYTES = 160 << 20


@dataclass(frozen=True, eq=False)
class EdfFile:
    """Where the data records are, and the channels kept: first byte in the record to values as written."""

    data: ByteSource
    header: EdfHeader
    kept: dict[int, np.ndarray] = field(default_factory=dict, repr=False)

    def blocks(self, stream: BinaryIO, first: int, stop: int) -> Iterator[tuple[int, int, np.ndarray]]:
        """Data records first to stop - 1 in blocks of about 8 MB: (first, stop, bytes of shape (n, record_bytes))."""
        header = self.header
        step = max(_BLOCK_BYTES // header.record_bytes, 1)
        for at in range(first, stop, step):
            end = min(at + step, stop)
            raw = self.data.read(stream, header.header_bytes + at * header.record_bytes, (end - at) * header.record_bytes)
            yield at, end, np.frombuffer(raw, dtype=np.uint8).reshape(end - at, header.record_bytes)

    def keep_steps(self, channels: Sequence[EdfChannel]) -> Steps[None]:
        """Read these channels whole in one pass, and keep them. Counts bytes.

        What was kept for longest makes room; a channel too large to be kept is left to be read when it is asked for.
        """
        n_records = self.header.n_records
        wanted: dict[int, np.ndarray] = {}
        room = _MOST_KEPT_BYTES
        for channel in channels:
            size = 2 * channel.samples_per_record * n_records
            if channel.first_byte in wanted or size > room:
                continue
            room -= size
            wanted[channel.first_byte] = self.kept.pop(channel.first_byte, np.empty(0, dtype="<i2"))
        older = list(self.kept)
        while sum(values.nbytes for values in self.kept.values()) > room:
            del self.kept[older.pop(0)]
        self.kept.update({first: values for first, values in wanted.items() if values.size})
        missing = {channel.first_byte: channel for channel in channels if channel.first_byte in wanted and not wanted[channel.first_byte].size}
        if not missing:
            return
        rows = {first: np.empty((n_records, 2 * channel.samples_per_record), dtype=np.uint8) for first, channel in missing.items()}
        with self.data.opened() as stream:
            for at, stop, block in self.blocks(stream, 0, n_records):
                for first, row in rows.items():
                    row[at:stop] = block[:, first : first + row.shape[1]]
                yield stop * self.header.record_bytes, n_records * self.header.record_bytes
        self.kept.update({first: row.view("<i2").ravel() for first, row in rows.items()})


@dataclass(frozen=True, eq=False)
class EdfSamples:
    """The samples of one channel, read from the file when asked for unless they are kept."""

    file: EdfFile
    channel: EdfChannel

    def read(self, first: int, stop: int) -> np.ndarray:
        """Physical values of samples first to stop - 1, shape (stop - first,)."""
        if stop <= first:
            return np.empty(0)
        digital = self.file.kept.get(self.channel.first_byte)
        if digital is not None:
            digital = digital[first:stop]
        else:
            with self.file.data.opened() as stream:
                large = self.file.header.record_bytes > _LARGE_RECORD
                digital = self._by_record(stream, first, stop) if large else self._by_block(stream, first, stop)
        return self.channel.offset + self.channel.gain * digital

    def _by_block(self, stream: BinaryIO, first: int, stop: int) -> np.ndarray:
        """Small data records: whole blocks of them are read and the channel cut out."""
        n = self.channel.samples_per_record
        a, b = first // n, -(-stop // n)
        parts = []
        for _, _, block in self.file.blocks(stream, a, b):
            part = block[:, self.channel.first_byte : self.channel.first_byte + 2 * n]
            parts.append(np.ascontiguousarray(part).view("<i2").ravel())
        return np.concatenate(parts)[first - a * n : stop - a * n]

    def _by_record(self, stream: BinaryIO, first: int, stop: int) -> np.ndarray:
        """Large data records: the channel's own bytes are read from each."""
        n, header = self.channel.samples_per_record, self.file.header
        parts = []
        at = first
        while at < stop:
            record, inside = divmod(at, n)
            size = min(n - inside, stop - at)
            offset = header.header_bytes + record * header.record_bytes + self.channel.first_byte + 2 * inside
            parts.append(np.frombuffer(self.file.data.read(stream, offset, 2 * size), dtype="<i2"))
            at += size
        return np.concatenate(parts)
