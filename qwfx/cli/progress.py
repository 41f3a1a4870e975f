"""Progress of long work: a line on standard error that is there on a terminal only and goes when the work ends."""

from __future__ import annotations

import sys
import threading
from collections.abc import Callable, Iterator
from contextlib import contextmanager

__all__ = ["announce_compilation", "progress_line"]

SHOW_AFTER = 0.5  # seconds; short work should not flicker


def announce_compilation() -> None:
    """Compile the kernels if that was never done on this machine, and say so on a terminal while it lasts."""
    from qwfx import kernels

    if kernels.compiled():
        return
    if not sys.stderr.isatty():
        kernels.prepare()
        return
    from rich.console import Console

    with Console(stderr=True).status("compiling the evaluation kernels: once on this machine, about 20 seconds"):
        kernels.prepare()


@contextmanager
def progress_line() -> Iterator[Callable[[str, float], None] | None]:
    """Yields the callback that verbs hand down, or None where standard error is not a terminal."""
    if not sys.stderr.isatty():
        yield None
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    bar = Progress(
        TextColumn("{task.description}"),
        BarColumn(bar_width=30),
        TextColumn("{task.percentage:>3.0f} %"),
        TimeElapsedColumn(),
        console=Console(stderr=True),
        transient=True,
    )
    task = bar.add_task("", total=1.0)
    # A timer and not the first update decides when the line appears: the first phase may be the long one.
    timer = threading.Timer(SHOW_AFTER, bar.start)
    timer.daemon = True
    timer.start()

    def update(phase: str, fraction: float) -> None:
        bar.update(task, description=phase, completed=min(max(fraction, 0.0), 1.0))

    try:
        yield update
    finally:
        timer.cancel()
        timer.join()
        bar.stop()
