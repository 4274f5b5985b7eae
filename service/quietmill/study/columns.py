"""The columns of a DATA file, a chunk of rows at a time, as texts."""

import csv
from collections.abc import Iterator, Sequence
from io import TextIOWrapper
from itertools import islice
from pathlib import Path
from typing import Final, NamedTuple

__all__ = ["CHUNK_ROWS", "Columns", "DataError", "read_columns"]

CHUNK_ROWS: Final = 32_768
NEEDED: Final = ("time", "characteristic", "value")
OPTIONAL: Final = ("sequence", "message", "arrival")
NOT_TEXT: Final = frozenset({".parquet", ".gz", ".zip", ".xz", ".xlsx"})


class DataError(Exception):
    """A file that cannot be read at all; the message says why and what to do."""


class Columns(NamedTuple):
    """The texts of successive rows, column by column; a column that the file does not have is empty.

    `lines` are the rows' lines in the file, `short` the lines of rows with too few cells, which are left out;
    `bytes_done` is how far the file was read.
    """

    lines: Sequence[int]
    time: Sequence[str]
    characteristic: Sequence[str]
    value: Sequence[str]
    sequence: Sequence[str] = ()
    message: Sequence[str] = ()
    arrival: Sequence[str] = ()
    short: Sequence[int] = ()
    bytes_done: int = 0


def places_of(path: Path, header: Sequence[str]) -> dict[str, int]:
    """Return where each column stands. Raises `DataError` for a header without the needed ones."""
    names = [name.strip() for name in header]
    missing = [name for name in NEEDED if name not in names]
    if missing:
        found = ", ".join(names[:8]) or "nothing"
        raise DataError(
            f"{path}:1: the header needs the columns {', '.join(NEEDED)}; it lacks {', '.join(missing)}, found {found}"
            + ("; with one column a characteristic, use --wide" if names[:1] == ["time"] else "")
        )
    return {name: names.index(name) for name in (*NEEDED, *OPTIONAL) if name in names}


def in_columns(rows: Sequence[Sequence[str]], lines: Sequence[int], places: dict[str, int], done: int) -> Columns:
    """Turn rows into columns."""
    width = max(places.values()) + 1
    short: list[int] = []
    if any(len(row) < width for row in rows):
        short = [line for line, row in zip(lines, rows, strict=True) if row and len(row) < width]
        whole = [(line, row) for line, row in zip(lines, rows, strict=True) if len(row) >= width]
        lines, rows = [line for line, _ in whole], [row for _, row in whole]
    columns = {name: [row[place] for row in rows] for name, place in places.items()}
    return Columns(lines, **columns, short=short, bytes_done=done)


def unfolded(rows: Sequence[Sequence[str]], lines: Sequence[int], names: Sequence[str], done: int) -> Columns:
    """Turn rows with one column a characteristic into rows of one reading; an empty cell is none."""
    cells = [
        (line, row[0], name, cell)
        for line, row in zip(lines, rows, strict=True)
        for name, cell in zip(names[1:], row[1:], strict=False)
        if cell.strip()
    ]
    if not cells:
        return Columns([], [], [], [], bytes_done=done)
    return Columns(*map(list, zip(*cells, strict=True)), bytes_done=done)  # pyright: ignore[reportArgumentType]


def read_columns(path: Path, wide: bool = False, skip: int = 0) -> Iterator[Columns]:
    """Yield the chunks of a CSV file after its first `skip` rows, no message cut in two.

    Raises `DataError` when the file cannot be read at all.
    """
    if path.suffix.lower() in NOT_TEXT:
        raise DataError(f"{path}: {path.suffix} files are not supported yet; give CSV")
    try:
        with path.open("rb") as raw, TextIOWrapper(raw, "utf-8-sig", errors="replace", newline="") as file:
            reader = csv.reader(file)
            header = next(reader, None)
            if header is None:
                raise DataError(f"{path}: is empty")
            if any("\0" in name or "\N{REPLACEMENT CHARACTER}" in name for name in header):
                raise DataError(f"{path}: is not CSV text")
            names = [name.strip() for name in header]
            if wide and names[0] != "time":
                raise DataError(f"{path}:1: the first column must be time, is {names[0]!r}")
            places = {} if wide else places_of(path, header)
            for _ in range(skip):
                while not next(reader, ["at the end"]):
                    pass
            begun = reader.line_num
            held: list[list[str]] = []
            held_lines: list[int] = []
            while rows := list(islice(reader, CHUNK_ROWS)):
                ended = reader.line_num
                # where no cell holds a line break, the lines are known without counting each
                lines = list(range(begun + 1, ended + 1)) if ended - begun == len(rows) else [ended] * len(rows)
                begun = ended
                rows, lines = held + rows, held_lines + lines
                cut = len(rows)
                if "message" in places:
                    cut = whole_messages(rows, places["message"])
                held, held_lines = rows[cut:], lines[cut:]
                done = raw.tell()
                yield (
                    unfolded(rows[:cut], lines[:cut], names, done)
                    if wide
                    else in_columns(rows[:cut], lines[:cut], places, done)
                )
            if held:
                yield in_columns(held, held_lines, places, raw.tell())
    except IsADirectoryError:
        raise DataError(f"{path}: is a folder; name the CSV files in it") from None
    except OSError as error:
        raise DataError(f"{path}: cannot be read: {error.strerror or error}") from None
    except csv.Error as error:
        raise DataError(f"{path}: is not CSV: {error}") from None


def whole_messages(rows: Sequence[Sequence[str]], place: int) -> int:
    """Return how many rows come before the last message, which may go on in the next chunk."""
    last = rows[-1][place] if len(rows[-1]) > place else ""
    if not last:
        return len(rows)
    cut = len(rows)
    while cut and len(rows[cut - 1]) > place and rows[cut - 1][place] == last:
        cut -= 1
    return cut
