"""One pass over a plain or gzip file, digested on the way, with its faults put into words."""

from __future__ import annotations

import gzip
import hashlib
import io
import os
import zlib
from collections.abc import Iterator
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from seedaudit.errors import DataError, Problem

# isal is several times faster than zlib, but not built for every platform.
GzipFile: Any
INFLATE_ERRORS: tuple[Any, ...]
try:
    from isal import igzip, igzip_lib

    GzipFile, INFLATE_ERRORS = igzip.IGzipFile, (gzip.BadGzipFile, zlib.error, igzip_lib.IsalError)
except ImportError:
    GzipFile, INFLATE_ERRORS = gzip.GzipFile, (gzip.BadGzipFile, zlib.error)

_CHUNK = 1 << 20
_COPY_AGAIN = "copy the file again"


@dataclass(frozen=True)
class Stream:
    """The bytes of a file after decompression, in order.

    Parameters
    ----------
    path : Path
    compressed : bool
        Whether the file is gzip, told by its first bytes and not by its name.
    """

    path: Path
    compressed: bool
    _source: Any
    _digest: hashlib._Hash

    def fill(self, buffer: bytearray | memoryview) -> int:
        """Fill the buffer; the count is short only at the end of the file."""
        view = memoryview(buffer)
        count = 0
        while count < len(view):
            got = self._source.readinto(view[count:])
            if not got:
                break
            count += got
        return count

    def skip(self, count: int) -> None:
        """Leave out so many bytes, or what there is of them."""
        while count > 0:
            got = len(self._source.read(min(count, _CHUNK)))
            count = count - got if got else 0

    def finish(self) -> str:
        """Read to the end and return the SHA-256 of the file as stored.

        Only the end of a gzip stream tells whether its checksum holds.
        """
        while self._source.read(_CHUNK):
            pass
        return self._digest.hexdigest()


class _HashingReader(io.RawIOBase):
    def __init__(self, raw: io.FileIO) -> None:
        self._raw = raw
        self.digest = hashlib.sha256()

    def readable(self) -> bool:
        return True

    def readinto(self, buffer: Any) -> int:
        count = self._raw.readinto(buffer) or 0
        self.digest.update(memoryview(buffer)[:count])
        return count


def read_ahead(path: Path) -> None:
    """Ask the system to bring a file into its cache; it does so while the program computes.

    Decompressing ahead would cost a second buffer of voxel series for each worker, and no core is
    idle that could do it; what can be waited for is the disk or the network. Does nothing where
    the system has no such call; a file that cannot be read is told by its reader.
    """
    with suppress(OSError, AttributeError), open(path, "rb", buffering=0) as file:
        os.posix_fadvise(file.fileno(), 0, 0, os.POSIX_FADV_WILLNEED)


@contextmanager
def opened(path: Path) -> Iterator[Stream]:
    """Open a plain or gzip file for one pass.

    Raises
    ------
    DataError
        When the file is missing or cannot be read, or its gzip stream is truncated or corrupt,
        at whatever point of the pass this shows.
    """
    try:
        with open(path, "rb", buffering=0) as raw:
            compressed = raw.read(2) == b"\x1f\x8b"
            raw.seek(0)
            tap = _HashingReader(raw)
            if not compressed:
                yield Stream(path, False, tap, tap.digest)
                return
            with GzipFile(fileobj=tap, mode="rb") as source:
                yield Stream(path, True, source, tap.digest)
    except EOFError:
        found = "the gzip stream ends early (truncated file)"
        raise DataError(Problem(str(path), found, remedy=_COPY_AGAIN)) from None
    except INFLATE_ERRORS as error:
        found = f"the gzip stream is corrupt ({error})"
        raise DataError(Problem(str(path), found, remedy=_COPY_AGAIN)) from error
    except FileNotFoundError:
        raise DataError(Problem(str(path), "no such file")) from None
    except OSError as error:
        found = f"cannot be read ({error.strerror or error})"
        raise DataError(Problem(str(path), found)) from error
