"""On which machine a benchmark ran, and the median of its ratios."""

import os
import platform
from collections.abc import Callable
from pathlib import Path
from statistics import median


def machine() -> str:
    """Return processor, cores, Python and system in one line."""
    model = platform.processor() or platform.machine()
    cpuinfo = Path("/proc/cpuinfo")
    if cpuinfo.exists():
        names = [line.split(":", 1)[1].strip() for line in cpuinfo.read_text().splitlines() if "model name" in line]
        model = names[0] if names else model
    return (
        f"{model}, {os.cpu_count()} cores, Python {platform.python_version()}, {platform.system()} {platform.release()}"
    )


def paired(ours: Callable[[], float], theirs: Callable[[], float], runs: int = 5) -> tuple[float, float, float]:
    """Run both by turns; return the medians of ours, theirs and of their ratio."""
    pairs = [(ours(), theirs()) for _ in range(runs)]
    return median(a for a, _ in pairs), median(b for _, b in pairs), median(a / b for a, b in pairs)
