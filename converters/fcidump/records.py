"""The records of an FCIDUMP file, ``value i j k l`` line by line, parsed from bytes, a piece of the file at a time."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass
from pathlib import Path
from typing import Any, NoReturn

import numpy as np
from numba import njit
from numpy.typing import NDArray

from qwfx.converters.numbers import JIT, NOT_A_NUMBER, UNDECIDED, number_and_unit, power_table, text_to_float
from qwfx.errors import ConversionError, FileError
from qwfx.kernels.stale import forget_stale

__all__ = ["COARSEST", "LARGEST_INDEX", "Records", "Source", "compiled"]

PIECE = 1 << 18
AHEAD = 2
"""Pieces that are parsed while the caller is busy with one."""
SHORTEST = 10  # bytes of a record: "1 1 1 1 1\n"
FINE, BAD_VALUE, FEW, BAD_INDEX, MORE, SLOW = range(6)
PROBLEMS = {
    BAD_VALUE: ("the value is not a finite number", "a number such as 1.5E-03, or (re,im)"),
    FEW: ("the line ends before four indices", "value i j k l"),
    BAD_INDEX: ("an index is not a whole number", "four whole numbers from 0"),
    MORE: ("there is more behind the four indices", "value i j k l"),
}
LARGEST_INDEX = 1_000_000
COARSEST = -6
"""A last digit coarser than 1e-6 belongs to a number like 0.5, which was printed in full."""


@dataclass(frozen=True)
class Records:
    """The records of one piece of the file. The arrays are used again for the next piece."""

    first: int
    """Number of the first one, from 0."""
    real: NDArray[np.float64]
    imaginary: NDArray[np.float64]
    unit: NDArray[np.int8]
    """Power of ten of the last printed digit, -126..COARSEST."""
    index: NDArray[np.int32]
    """(n, 4), from 1 as written."""
    place: NDArray[np.int64]
    """(n) byte of the file at which each record begins."""
    done: float
    """Fraction of the file that is behind us."""


class _Room:
    """Arrays for the records of a piece, used again for later ones."""

    real: NDArray[np.float64]
    imaginary: NDArray[np.float64]
    unit: NDArray[np.int8]
    index: NDArray[np.int32]
    place: NDArray[np.int64]

    def __init__(self) -> None:
        self.size = -1
        self.make(0)

    def make(self, n: int) -> None:
        """Room for n records at least; what was in it is lost."""
        if n > self.size:
            self.size = n
            self.real, self.imaginary = np.empty(n), np.empty(n)
            self.unit, self.place = np.empty(n, dtype=np.int8), np.empty(n, dtype=np.int64)
            self.index = np.empty((n, 4), dtype=np.int32)


class Source:
    """A file whose records are read, again if need be, without ever holding the whole of it."""

    def __init__(self, path: Path) -> None:
        self.path, self.name = path, str(path)
        self.start = 0
        """Byte behind the namelist."""
        try:
            self.size = path.stat().st_size
        except OSError as error:
            raise self.unreadable(error) from None

    def unreadable(self, error: OSError) -> FileError:
        """The error to raise for one of the operating system."""
        return FileError(
            f"cannot be read ({error.strerror or error})",
            where=self.name,
            expected="a readable file",
            remedy="check the path and the permissions",
        )

    def head(self, length: int) -> bytes:
        """The first bytes of the file."""
        try:
            with open(self.path, "rb") as stream:
                return stream.read(length)
        except OSError as error:
            raise self.unreadable(error) from None

    def line(self, place: int) -> int:
        """Number, from 1, of the line that holds a byte."""
        count, left = 1, place
        with open(self.path, "rb") as stream:
            while left > 0 and (piece := stream.read(min(left, PIECE))):
                count += piece.count(b"\n")
                left -= len(piece)
        return count

    def where(self, place: int) -> str:
        """File and line of a byte, for messages."""
        return f"{self.name}:{self.line(place)}"

    def end(self) -> str:
        """File and last line, for messages."""
        return self.where(max(0, self.size - 1))

    def ends_with_newline(self) -> bool:
        """Whether the last line is complete."""
        try:
            with open(self.path, "rb") as stream:
                stream.seek(max(0, self.size - 1))
                return stream.read(1) == b"\n"
        except OSError as error:
            raise self.unreadable(error) from None

    def pieces(self) -> Iterator[tuple[int, bytes]]:
        """Offset and bytes of pieces of whole lines behind the namelist; each ends with a line feed."""
        try:
            with open(self.path, "rb") as stream:
                stream.seek(self.start)
                offset, rest = self.start, b""
                while piece := stream.read(PIECE):
                    end = piece.rfind(b"\n") + 1
                    if end:
                        whole = rest + piece[:end]
                        yield offset, whole
                        offset, rest = offset + len(whole), piece[end:]
                    elif len(rest) > PIECE:
                        self.complain(rest[:80] + b"\n", offset, 0, BAD_VALUE)
                    else:
                        rest += piece
                if rest.strip():
                    yield offset, rest + b"\n"
        except OSError as error:
            raise self.unreadable(error) from None

    def records(self) -> Iterator[Records]:
        """All records in order, good until the next are asked for; pieces ahead are parsed in threads meanwhile.

        Raises ConversionError with the line of the first that is none.
        """
        table, first = power_table(), 0
        rooms = [_Room() for _ in range(AHEAD + 1)]  # one is with the caller, the others with the threads
        pending: deque[tuple[int, int, Future[tuple[int, _Room]]]] = deque()
        with ThreadPoolExecutor(AHEAD) as pool:
            pieces = enumerate(self.pieces())
            while True:
                while len(pending) < AHEAD and (following := next(pieces, None)):
                    number, (offset, piece) = following
                    job = pool.submit(self.parsed, offset, piece, table, rooms[number % len(rooms)])
                    pending.append((offset, len(piece), job))
                if not pending:
                    return
                offset, length, job = pending.popleft()
                n, room = job.result()
                if n:
                    done = (offset + length) / max(self.size, 1)
                    yield Records(
                        first, room.real[:n], room.imaginary[:n], room.unit[:n], room.index[:n], room.place[:n], done
                    )
                    first += n

    def parsed(self, offset: int, piece: bytes, table: NDArray[np.uint64], room: _Room) -> tuple[int, _Room]:
        """The number of records of a piece, which lie in the room. Raises ConversionError."""
        room.make(len(piece) // SHORTEST + 1)
        bits, text = np.zeros(1, dtype=np.uint64), np.frombuffer(piece, dtype=np.uint8)
        real, imaginary = room.real.view(np.uint64), room.imaginary.view(np.uint64)
        n, position, status = 0, 0, SLOW
        while status == SLOW:
            n, position, status = _parse(
                text, position, n, table, bits, real, imaginary, room.unit, room.index, room.place
            )
            if status == SLOW:
                values, room.unit[n], room.index[n], position, room.place[n] = self.slowly(piece, offset, position)
                room.real[n], room.imaginary[n] = values
                n += 1
        if status != FINE:
            self.complain(piece, offset, position, status)
        room.place[:n] += offset
        return n, room

    def slowly(self, piece: bytes, offset: int, position: int) -> tuple[list[float], int, list[int], int, int]:
        """One record whose value only Python's own parser can round: values, unit, indices, end, begin."""
        end = piece.index(b"\n", position)
        line = piece[position:end]
        try:
            if line.startswith(b"("):
                inside, _, rest = line[1:].partition(b")")
                tokens = inside.split(b",")
            else:
                token, _, rest = line.replace(b",", b" ").replace(b"\t", b" ").partition(b" ")
                tokens = [token, b"0"]
            values = [text_to_float(token) for token in tokens]
            words = rest.replace(b",", b" ").split()
            if not all(word.isdigit() for word in words):
                raise ValueError
            index = [min(int(word), LARGEST_INDEX) for word in words]
            if len(values) != 2 or not np.isfinite(values).all():
                raise ValueError
        except (ValueError, UnicodeDecodeError):
            self.complain(piece, offset, position, BAD_VALUE)
        if len(index) != 4:
            self.complain(piece, offset, position, FEW if len(index) < 4 else MORE)
        return values, -126 if abs(values[0]) < 1e-100 else COARSEST, index, end, position

    def complain(self, piece: bytes, offset: int, position: int, status: int) -> NoReturn:
        """Raise the error for a line that is no record."""
        begin = piece.rfind(b"\n", 0, position) + 1
        end = piece.find(b"\n", position)
        shown = piece[begin:end].decode("latin-1").strip()
        found, expected = PROBLEMS[status]
        last = offset + end >= self.size - 1 and not piece[end:].strip()
        raise ConversionError(
            f"{found}: {shown[:60]!r}",
            where=self.where(offset + begin),
            expected=expected,
            remedy="the file is cut off here: write it again" if last else "mend the line, or write the file again",
        )


@njit(**JIT)  # type: ignore[untyped-decorator]
def _parse(
    text: Any, start: int, n: int, table: Any, bits: Any, real: Any, imaginary: Any, unit: Any, index: Any, place: Any
) -> tuple[int, int, int]:
    """Parse records from `start` on; the number of records, the position reached, and what stopped it."""
    i, end = start, len(text)
    while True:
        while i < end and text[i] <= 32:
            i += 1
        if i >= end:
            return n, end, FINE
        begin = i
        imaginary[n] = np.uint64(0)
        parts = 1
        if text[i] == 40:  # (re,im)
            parts = 2
            i += 1
        last = -126
        for part in range(parts):
            while parts == 2 and (text[i] == 32 or text[i] == 9):
                i += 1
            i, status, printed = number_and_unit(text, i, end, table, bits)
            if status == UNDECIDED:
                return n, begin, SLOW
            if status == NOT_A_NUMBER:
                return n, begin, BAD_VALUE
            last = max(last, min(printed, COARSEST))
            if part == 0:
                real[n] = bits[0]
            else:
                imaginary[n] = bits[0]
            if parts == 2:
                while text[i] == 32 or text[i] == 9:
                    i += 1
                if text[i] != (44 if part == 0 else 41):
                    return n, begin, BAD_VALUE
                i += 1
        unit[n] = last
        for column in range(4):
            while text[i] == 32 or text[i] == 9 or text[i] == 44:
                i += 1
            if text[i] == 10 or text[i] == 13:
                return n, begin, FEW
            if text[i] == 43:
                i += 1
            value, digits = 0, 0
            while 48 <= text[i] <= 57:
                value = min(value * 10 + (text[i] - 48), LARGEST_INDEX)
                digits += 1
                i += 1
            if digits == 0 or not (text[i] <= 32 or text[i] == 44):
                return n, begin, BAD_INDEX
            index[n, column] = value
        while text[i] == 32 or text[i] == 9 or text[i] == 13:
            i += 1
        if text[i] != 10:
            return n, begin, MORE
        place[n] = begin
        n += 1


def compiled() -> bool:
    """Whether the parser is compiled already, here or in the cache on the disk."""
    if _parse.signatures:
        return True
    try:
        return bool(_parse._cache._cache_file._load_index())
    except AttributeError:  # another version of Numba keeps it elsewhere
        return True


forget_stale(_parse, Path(__file__).parent, Path(__file__).parents[1])
