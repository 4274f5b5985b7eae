"""Clean CSV at the speed of pyarrow, where the extra `study` brings it; what is not clean is left to `columns`."""

from collections.abc import Generator, Mapping
from importlib import import_module
from pathlib import Path
from typing import Any, Final, NamedTuple

import numpy as np
from numpy.typing import NDArray

__all__ = ["CleanColumns", "read_clean"]


def optional(name: str) -> Any:
    """Return a module of the extra, or None where it is not installed."""
    try:
        return import_module(name)
    except ImportError:
        return None


pa: Any = optional("pyarrow")
pc: Any = optional("pyarrow.compute")
arrow_csv: Any = optional("pyarrow.csv")

BLOCK_BYTES: Final = 4 * 1024 * 1024
NEEDED: Final = ("time", "characteristic", "value")
NOT_HERE: Final = frozenset({"sequence", "message", "arrival"})
"""Columns that need more than this reads."""

NUMBER: Final = r"^-?(0|[1-9][0-9]*)(\.[0-9]+)?([eE][+-]?[0-9]+)?$"
PLAIN_TIME: Final = r"^[0-9]{4}-[0-9]{2}-[0-9]{2}T[0-9]{2}:[0-9]{2}:[0-9]{2}(\.[0-9]{1,6})?Z$"


class CleanColumns(NamedTuple):
    """The columns of successive rows in which nothing is doubtful: rows of the bank, microseconds, values."""

    rows: NDArray[np.int64]
    time: NDArray[np.int64]
    value: NDArray[np.float64]
    bytes_done: int


def all_match(column: Any, pattern: str) -> bool:
    """Return whether every text of a column matches."""
    return bool(pc.all(pc.match_substring_regex(column, pattern)).as_py())


def clean(batch: Any, rows_by_id: Mapping[str, int], done: int) -> CleanColumns | None:
    """Return the columns of a batch, or None where anything in it is doubtful."""
    names = batch.column("characteristic").dictionary_encode()
    rows = [rows_by_id.get(name) for name in names.dictionary.to_pylist()]
    if None in rows or not all_match(batch.column("value"), NUMBER) or not all_match(batch.column("time"), PLAIN_TIME):
        return None
    value = batch.column("value").cast(pa.float64()).to_numpy()
    if not np.isfinite(value).all():
        return None
    time = batch.column("time").cast(pa.timestamp("us", "UTC")).cast(pa.int64()).to_numpy()
    return CleanColumns(np.array(rows, np.int64)[names.indices.to_numpy()], time, value, done)


def read_clean(path: Path, rows_by_id: Mapping[str, int]) -> Generator[CleanColumns, None, bool]:
    """Yield the chunks of a file up to the first in which anything is doubtful, or to the end.

    Returns whether that was the end; else the caller reads on from the rows that it got. Blank lines are no rows.
    """
    if pa is None:
        return False
    try:
        with pa.OSFile(str(path)) as file:
            reader = arrow_csv.open_csv(
                file,
                arrow_csv.ReadOptions(block_size=BLOCK_BYTES),
                convert_options=arrow_csv.ConvertOptions(column_types=dict.fromkeys(NEEDED, pa.string())),
            )
            names = reader.schema.names
            if len(set(names)) != len(names) or not set(NEEDED) <= set(names) or NOT_HERE & set(names):
                return False
            for batch in reader:
                columns = clean(batch, rows_by_id, file.tell())
                if columns is None:
                    return False
                yield columns
    except (pa.ArrowException, OSError):
        return False
    return True
