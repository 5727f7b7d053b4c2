"""What the terminal shows of a list: progress while it runs, who needs a call first at the end."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import contextmanager

from rich.console import Console, Group
from rich.markup import escape
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeRemainingColumn
from rich.table import Table
from rich.text import Text

from planner.clients.listing import ListResult, Watch
from planner.clients.rows import LIKELY_CUT, ClientRow, reasons

_MOST_SHOWN = 10


class _Lines:
    """A plain line per client."""

    def __init__(self, console: Console) -> None:
        self.console = console
        self.total = self.done = 0

    def begin(self, total: int) -> None:
        self.total = total

    def client(self, row: ClientRow, *, already: bool) -> None:
        self.done += 1
        line = f"{self.done}/{self.total} {row.workbook}: {outcome(row, already=already)}"
        self.console.print(escape(line), soft_wrap=True)


class _Bar:
    """Clients done, failed, time left."""

    def __init__(self, bar: Progress) -> None:
        self.bar = bar
        self.failed = 0
        self.task = bar.add_task("clients", total=None, failed=0)

    def begin(self, total: int) -> None:
        self.bar.update(self.task, total=total)

    def client(self, row: ClientRow, *, already: bool) -> None:
        self.failed += row.state != "planned"
        self.bar.update(self.task, advance=1, failed=self.failed)


def outcome(row: ClientRow, *, already: bool) -> str:
    """How it went with one client, in a few words."""
    if row.state == "problems":
        first = next(problem for problem in row.problems if problem.severity == "error")
        count = sum(problem.severity == "error" for problem in row.problems)
        return f"{count} problem{'s' if count != 1 else ''}, first {first.where}: {first.message}"
    if row.state == "failed":
        return f"failed: {row.failure}"
    return "done before" if already else "planned"


@contextmanager
def watching(console: Console) -> Iterator[Watch]:
    """Draw a bar where the console is a terminal; else print a line per client."""
    if not console.is_terminal:
        yield _Lines(console)
        return
    columns = (
        TextColumn("{task.description}"),
        BarColumn(),
        MofNCompleteColumn(),
        TextColumn("{task.fields[failed]} without a plan"),
        TimeRemainingColumn(),
        TextColumn("left"),
    )
    with Progress(*columns, console=console, transient=True) as bar:
        yield _Bar(bar)


def summary(result: ListResult) -> Group:
    """Counts, and the clients who need a call first, each with the first reason."""
    rows = result.rows
    counts = {state: sum(row.state == state for row in rows) for state in ("planned", "problems", "failed")}
    parts = [f"{counts['planned']:,} planned" + (f" ({result.already:,} before)" if result.already else "")]
    if counts["problems"]:
        parts.append(f"{counts['problems']:,} with problems in the workbook")
    if counts["failed"]:
        parts.append(f"{counts['failed']:,} failed")
    first = [row for row in rows if reasons(row)][:_MOST_SHOWN]
    blocks: list[Text | Table] = []
    if first:
        blocks += [_table(first), Text()]
    blocks += [Text(line) for line in _changes(rows)]
    blocks.append(Text(f"{len(rows):,} client{'s' if len(rows) != 1 else ''}: {', '.join(parts)}"))
    return Group(*blocks)


def _changes(rows: Sequence[ClientRow]) -> Iterator[str]:
    """For each change asked for all: how many clients have to cut their bills likely enough to call."""
    names = dict.fromkeys(figures.name for row in rows for figures in row.changed)
    for name in names:
        pairs = [
            (row.chance_below_essential or 0.0, figures.chance_below_essential)
            for row in rows
            for figures in row.changed
            if figures.name == name and figures.chance_below_essential is not None
        ]
        before = sum(chance >= LIKELY_CUT for chance, _ in pairs)
        after = sum(chance >= LIKELY_CUT for _, chance in pairs)
        yield (
            f"With '{name}' bills are cut in at least {LIKELY_CUT:.0%} of futures for {after:,} of "
            f"{len(pairs):,} clients; as planned for {before:,}."
        )


def _table(rows: Sequence[ClientRow]) -> Table:
    table = Table(box=None, padding=(0, 1), header_style="bold")
    table.add_column("who needs a call first", max_width=30)
    table.add_column("why")
    for row in rows:
        table.add_row(Text(row.client or row.workbook), Text(reasons(row)[0][2]))
    return table
