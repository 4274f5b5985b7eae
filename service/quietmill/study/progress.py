"""A bar for long work, on a terminal only."""

from collections.abc import Callable, Generator, Sequence
from contextlib import contextmanager
from pathlib import Path

from rich.console import Console
from rich.progress import BarColumn, Progress, TextColumn, TimeRemainingColumn

__all__ = ["progress_over"]


@contextmanager
def progress_over(paths: Sequence[Path]) -> Generator[Callable[[int, int], None]]:
    """Show how far the reading of files has come; yield what is to be told readings and bytes done."""
    console = Console(stderr=True)
    columns = (
        BarColumn(),
        TextColumn("{task.percentage:>3.0f} %"),
        TextColumn("{task.fields[rate]}"),
        TimeRemainingColumn(),
    )
    with Progress(*columns, console=console, transient=True, disable=not console.is_terminal) as bar:
        task = bar.add_task("", total=sum(path.stat().st_size for path in paths if path.is_file()), rate="")

        def told(readings: int, done: int) -> None:
            elapsed = bar.tasks[0].elapsed
            rate = f"{readings / elapsed:,.0f} readings/s" if elapsed else ""
            bar.update(task, completed=done, rate=rate)

        yield told
