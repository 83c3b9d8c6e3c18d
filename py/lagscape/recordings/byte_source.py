"""Bytes by position, of a path, of a stream or of memory."""

import io
import os
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

from lagscape.errors import RecordingError
from lagscape.recordings.csv_text import Source

__all__ = ["ByteSource"]


@dataclass(frozen=True, eq=False)
class ByteSource:
    """Bytes of a path or of a seekable binary file, by position. A path is open only while it is read."""

    source: Path | BinaryIO
    size: int
    name: str

    @classmethod
    def of(cls, source: Source) -> "ByteSource":
        """Raises RecordingError where the source cannot be read by position."""
        if isinstance(source, bytes | bytearray | memoryview):
            return cls(io.BytesIO(bytes(source)), len(source), "recording")
        if isinstance(source, str | os.PathLike):
            path = Path(source)
            try:
                return cls(path, path.stat().st_size, path.name)
            except (OSError, ValueError) as error:
                raise RecordingError(f"cannot open '{path.name}': {getattr(error, 'strerror', None) or error}") from error
        try:
            source.seek(0, os.SEEK_END)
            size = source.tell()
        except (AttributeError, OSError, ValueError) as error:
            raise RecordingError("an EDF file is read by position; the stream that was given cannot be positioned") from error
        return cls(source, size, Path(str(getattr(source, "name", "recording"))).name)

    @contextmanager
    def opened(self) -> Iterator[BinaryIO]:
        if isinstance(self.source, Path):
            with self.source.open("rb") as stream:
                yield stream
        else:
            yield self.source

    def read(self, stream: BinaryIO, offset: int, size: int) -> bytes:
        """Exactly `size` bytes; RecordingError where the file has become shorter or fails."""
        try:
            stream.seek(offset)
            parts = []
            left = size
            while left:
                part = stream.read(left)
                if not part:
                    raise RecordingError("the file has become shorter while it was read")
                parts.append(bytes(part))
                left -= len(part)
        except OSError as error:
            raise RecordingError(f"the file could not be read: {error.strerror or error}") from error
        return b"".join(parts)
