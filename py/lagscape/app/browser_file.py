"""A file the user opened, read by Python piece by piece without ever being copied whole."""

from __future__ import annotations

import io
from typing import Any

__all__ = ["BrowserFile", "open_browser_file"]

BUFFER_BYTES = 1 << 20


class BrowserFile(io.RawIOBase):
    """A read-only binary stream over the browser's own File object, which stays on the user's disk.

    Parameters
    ----------
    file
        The browser's File.
    read_slice
        Takes the file, first byte and byte after the last; gives the bytes as a browser array.
    name, size
        File name, and length in bytes.
    """

    def __init__(self, file: Any, read_slice: Any, name: str, size: int) -> None:
        super().__init__()
        self._file, self._read_slice, self.name, self._size, self._at = file, read_slice, name, size, 0

    def readable(self) -> bool:
        """Always."""
        return True

    def seekable(self) -> bool:
        """Always."""
        return True

    def seek(self, offset: int, whence: int = io.SEEK_SET) -> int:
        """Moves to a place in bytes and returns it."""
        base = {io.SEEK_SET: 0, io.SEEK_CUR: self._at, io.SEEK_END: self._size}[whence]
        self._at = max(0, base + offset)
        return self._at

    def tell(self) -> int:
        """The present place in bytes."""
        return self._at

    def readinto(self, buffer: Any) -> int:
        """Fills the buffer from the present place; returns how many bytes there were, 0 at the end.

        Raises OSError where the browser can no longer read the file.
        """
        end = min(self._at + len(buffer), self._size)
        if end <= self._at:
            return 0
        try:
            part = self._read_slice(self._file, self._at, end)
        except Exception as error:  # the browser's own error, of which nothing outside the browser knows the type
            raise OSError("the browser no longer gives it out; it was moved or changed since it was opened, so open it again") from error
        part.assign_to(memoryview(buffer)[: end - self._at])
        count = end - self._at
        self._at = end
        return count

    def close(self) -> None:
        """Lets go of the browser's File."""
        self._file = None
        super().close()


def open_browser_file(file: Any, read_slice: Any, name: str, size: int) -> io.BufferedReader:
    """The same stream with a buffer, so that reading line by line asks the browser rarely."""
    return io.BufferedReader(BrowserFile(file, read_slice, name, size), BUFFER_BYTES)
