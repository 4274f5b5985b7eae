"""The one door to the compiler: everything else in this room is plain Python.

With `NUMBA_DISABLE_JIT=1` in the environment the same functions run uncompiled, with equal bits, for debugging and
as the readable reference; a record is then viewed as a recarray, so that its fields are attributes there as well.
"""

import hashlib
import os
from collections.abc import Callable
from pathlib import Path
from tempfile import NamedTemporaryFile
from typing import Any, Final, ParamSpec, TypeVar, cast

import numba  # pyright: ignore[reportMissingTypeStubs]
import numpy as np
from numpy.typing import NDArray

__all__ = ["CACHE_FOLDER", "COMPILED", "Record", "attributes", "compiled"]

P = ParamSpec("P")
R = TypeVar("R")

Record = Any
"""One element of a structured array, its fields read and written as attributes."""

CONFIG: Final[Any] = numba.config  # pyright: ignore[reportUnknownMemberType, reportPrivateImportUsage]
COMPILED: Final = not CONFIG.DISABLE_JIT


def fingerprint_of_sources() -> str:
    """Return a hash over every file that compiled code is made of.

    The compiler's own cache notices an edit in a function's own file, not one in a file that it calls.
    """
    room = Path(__file__).parent
    digest = hashlib.sha256(np.__version__.encode())
    for source in [*sorted(room.glob("*.py")), room.parent / "model.py"]:
        digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


def cache_folder() -> Path | None:
    """Return a folder for compiled code that can be written, or None.

    It is probed first, because the compiler raises at import where its cache cannot be written (a read-only install,
    a service account without a home).
    """
    root = os.environ.get("CACHE_DIRECTORY") or os.environ.get("XDG_CACHE_HOME") or str(Path("~/.cache").expanduser())
    folder = Path(root.split(":")[0]) / "quietmill" / f"compiled-{fingerprint_of_sources()}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with NamedTemporaryFile(dir=folder):
            pass
    except OSError:
        return None
    return folder


CACHE_FOLDER: Final = cache_folder() if COMPILED else None
"""Where compiled code is kept between starts; None where nothing can be kept and each start compiles anew."""

if CACHE_FOLDER is not None:
    CONFIG.CACHE_DIR = str(CACHE_FOLDER)


def compiled(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a function on first use; it gives the bits it would give uncompiled (no fast mathematics)."""
    wrap = cast(
        "Callable[[Callable[P, R]], Callable[P, R]]",
        numba.njit(cache=CACHE_FOLDER is not None, nogil=True, error_model="numpy"),  # pyright: ignore[reportUnknownMemberType]
    )
    return wrap(function)


def attributes(records: NDArray[Any]) -> NDArray[Any]:
    """Return the same memory in the form in which compiled functions (or, uncompiled, Python) read its fields."""
    return records if COMPILED else records.view(np.recarray)
