"""The scorecard: which planted faults were found, after how many points, and what was said for nothing."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from quietmill.demo.faults import Fault

__all__ = ["Scorecard"]


@dataclass(slots=True)
class Scorecard:
    """Sets raised signals against planted faults; the faults' truth stays here, the service never sees it.

    A signal that no fault explains is false: before its fault, long after a spike, or where none is. Each fault
    counts once.
    """

    ids: Sequence[str]
    faults: Mapping[int, Fault]
    found: dict[int, int] = field(default_factory=dict[int, int])
    """By row: after how many points of the fault."""
    false: list[str] = field(default_factory=list[str])

    def raised(self, characteristic: str, number: int) -> None:
        """Take a raised signal at a characteristic's point `number` (from 1)."""
        row = self.ids.index(characteristic)
        fault = self.faults.get(row)
        if fault is None or not fault.explains(number):
            self.false.append(characteristic)
        else:
            self.found.setdefault(row, number - fault.begin)

    def report(self, steps: int) -> RenderableType:
        """Return the table after so many points of each characteristic."""
        table = Table(box=None, padding=(0, 2, 0, 0), pad_edge=False, header_style="bold")
        table.add_column("planted fault", overflow="fold")
        table.add_column("on")
        table.add_column("from", justify="right")
        table.add_column("found")
        begun = 0
        for row, fault in sorted(self.faults.items(), key=lambda item: item[1].begin):
            if row in self.found:
                after = self.found[row]
                verdict = Text(f"after {after} point{'s' * (after != 1)}", style="green")
            elif steps <= fault.begin:
                verdict = Text("not yet begun", style="dim")
            else:
                verdict = Text(f"not in {steps - fault.begin} points", style="yellow")
            begun += steps > fault.begin
            table.add_row(fault.in_words, self.ids[row], str(fault.begin + 1), verdict)
        return Group(table, Text(), Text(self._total(begun, steps), style="bold"))

    def _total(self, begun: int, steps: int) -> str:
        """Return the result in a sentence."""
        false = len(self.false)
        where = f" ({', '.join(sorted(set(self.false)))})" if false else ""
        said = f"{false} false signal{'s' * (false != 1)}{where} in {self._undisturbed(steps):,} points without a fault"
        if begun:
            return f"{len(self.found)} of {begun} faults that have begun were found; {said}."
        first = min((fault.begin for fault in self.faults.values()), default=0) + 1
        return f"No planted fault has begun; {said}. The first begins at point {first}: let the demo run longer."

    def _undisturbed(self, steps: int) -> int:
        """Return at how many points of all characteristics a signal would be false."""
        count = steps * len(self.ids)
        for fault in self.faults.values():
            count -= sum(fault.explains(number) for number in range(fault.begin + 1, steps + 1))
        return count
