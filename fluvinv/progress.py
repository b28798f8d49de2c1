"""Progress on stderr: a bar with the time left on a terminal, step names with -v."""

import sys
from collections.abc import Callable, Iterator
from contextlib import contextmanager


@contextmanager
def shown_progress(verbose: bool, quiet: bool) -> Iterator[Callable[[str, float], None]]:
    """Yield a function that is told each step's name and the share of the job done when it begins."""
    if quiet or not (verbose or sys.stderr.isatty()):
        yield lambda _step, _share: None
    elif not sys.stderr.isatty():
        yield lambda step, share: print(f"{share:4.0%} {step or 'done'}", file=sys.stderr)
    else:
        from rich.console import Console
        from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn, TimeRemainingColumn

        columns = (
            TextColumn("{task.description:<14}"),
            BarColumn(),
            TextColumn("{task.percentage:3.0f} %"),
            TimeElapsedColumn(),
            TextColumn("left"),
            TimeRemainingColumn(),
        )
        with Progress(*columns, console=Console(stderr=True), transient=not verbose) as bar:
            task = bar.add_task("starting", total=1.0)
            yield lambda step, share: bar.update(task, description=step or "done", completed=share)
