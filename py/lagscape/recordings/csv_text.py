"""Bytes of a text table as blocks of whole lines, in UTF-8 with '\\n' ends, whatever the file's own encoding and line ends.

Read in blocks, so that memory use does not grow with the file.
"""

import codecs
import contextlib
import io
import os
import re
from collections.abc import Iterator
from pathlib import Path
from typing import BinaryIO

from lagscape.errors import RecordingError

__all__ = ["BLOCK_BYTES", "Source", "open_source", "text_blocks"]

BLOCK_BYTES = 1 << 20
_LONGEST_LINE = 1 << 24

Source = str | os.PathLike[str] | bytes | bytearray | memoryview | BinaryIO

_FOREIGN = (
    (b"PK\x03\x04", "a spreadsheet or a zip archive; save the sheet as CSV"),
    (b"\xd0\xcf\x11\xe0", "an old spreadsheet; save the sheet as CSV"),
    (b"\x1f\x8b", "compressed; unpack it first"),
    (b"%PDF", "a PDF document; export the numbers as CSV"),
    (b"\x89PNG", "a picture; export the numbers as CSV"),
)


@contextlib.contextmanager
def open_source(source: Source) -> Iterator[tuple[BinaryIO, int | None, str]]:
    """A readable binary stream, its length in bytes where known, and a name without folders.

    A stream that was handed in stays open; a file opened here is closed.

    Raises
    ------
    RecordingError
        If the path cannot be read, or the object is no binary stream.
    """
    if isinstance(source, bytes | bytearray | memoryview):
        data = bytes(source)
        yield io.BytesIO(data), len(data), "recording"
    elif isinstance(source, str | os.PathLike):
        path = Path(source)
        try:
            stream = path.open("rb")
        except (OSError, ValueError) as error:
            reason = getattr(error, "strerror", None) or str(error)
            raise RecordingError(f"cannot open '{path.name}': {reason}") from error
        with stream:
            yield stream, os.fstat(stream.fileno()).st_size, path.name
    elif hasattr(source, "read"):
        yield source, _length_of(source), Path(str(getattr(source, "name", "recording"))).name
    else:
        raise RecordingError(f"a recording must be a path, bytes or a binary file, got {type(source).__name__}")


def _length_of(stream: BinaryIO) -> int | None:
    try:
        here = stream.tell()
        end = stream.seek(0, os.SEEK_END)
        stream.seek(here)
    except (AttributeError, OSError, ValueError):
        return None
    return end - here


def text_blocks(stream: BinaryIO) -> Iterator[tuple[bytes, int]]:
    """Blocks of whole lines, each ending with '\\n', and the file's bytes read so far. The first is enough to judge the table's layout.

    Raises
    ------
    RecordingError
        If the bytes are not text, or a line is longer than 16 MB.
    """
    raw = _read(stream, BLOCK_BYTES)
    if not raw:
        raise RecordingError("the file is empty")
    decoder = _decoder_for(raw[:65536])
    kept = b""
    done = 0
    while raw:
        done += len(raw)
        block = raw if decoder is None else decoder.decode(raw).encode()
        kept += block
        # A '\r' at the very end may be the first half of a '\r\n'.
        tail = b"\r" if kept.endswith(b"\r") else b""
        text = kept[: len(kept) - len(tail)].replace(b"\r\n", b"\n").replace(b"\r", b"\n")
        cut = text.rfind(b"\n") + 1
        if cut:
            yield text[:cut], done
        kept = text[cut:] + tail
        if len(kept) > _LONGEST_LINE:
            raise RecordingError("a line is longer than 16 MB; this is not a table of numbers")
        raw = _read(stream, BLOCK_BYTES)
    if decoder is not None:
        kept += decoder.decode(b"", True).encode()
    kept = kept.replace(b"\r", b"\n").rstrip(b"\n")
    if kept:
        yield kept + b"\n", done


def _read(stream: BinaryIO, size: int) -> bytes:
    try:
        raw = stream.read(size)
    except OSError as error:
        raise RecordingError(f"the file could not be read: {error.strerror or error}") from error
    if not isinstance(raw, bytes | bytearray | memoryview):
        raise RecordingError(f"a recording must be opened in binary mode, its read() gave {type(raw).__name__}")
    return bytes(raw)


def _decoder_for(head: bytes) -> codecs.IncrementalDecoder | None:
    """None for text whose bytes are taken as they are (ASCII, UTF-8, any single-byte code)."""
    for magic, what in _FOREIGN:
        if head.startswith(magic):
            raise RecordingError(f"the file is not a text table but {what}")
    for mark, encoding in (
        (codecs.BOM_UTF8, "utf-8-sig"),
        (codecs.BOM_UTF32_LE, "utf-32"),
        (codecs.BOM_UTF32_BE, "utf-32"),
        (codecs.BOM_UTF16_LE, "utf-16"),
        (codecs.BOM_UTF16_BE, "utf-16"),
    ):
        if head.startswith(mark):
            return codecs.getincrementaldecoder(encoding)(errors="replace")
    # Without a mark, two-byte text shows as a zero in nearly every second byte.
    even, odd = head[0::2], head[1::2]
    if len(head) >= 8 and odd.count(0) > 0.7 * len(odd) and even.count(0) < 0.05 * len(even):
        return codecs.getincrementaldecoder("utf-16-le")(errors="replace")
    if len(head) >= 8 and even.count(0) > 0.7 * len(even) and odd.count(0) < 0.05 * len(odd):
        return codecs.getincrementaldecoder("utf-16-be")(errors="replace")
    controls = len(re.findall(rb"[\x00-\x08\x0e-\x1f\x7f]", head))
    if controls > 0.02 * len(head):
        raise RecordingError("the file is not text: it holds binary bytes; a recording must be EDF or a text table (CSV)")
    return None
