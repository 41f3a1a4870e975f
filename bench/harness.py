"""Times alternatives in turn, A B A B ..., so that a machine that speeds up or slows down does so for all of them."""

from __future__ import annotations

import os
import time
from collections.abc import Callable
from statistics import median

__all__ = ["one_thread", "side_by_side"]


def one_thread() -> None:
    """Ask every library for one thread. Call before NumPy is imported."""
    for name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS", "NUMBA_NUM_THREADS"):
        os.environ[name] = "1"


def side_by_side(
    title: str, alternatives: dict[str, Callable[[], object]], runs: int = 5, wanted: str = ""
) -> dict[str, float]:
    """Time each alternative `runs` times in turn after one run that does not count, and print ratios.

    The first alternative is the one the others are measured against. The ratio is that of the medians; in brackets
    the smallest and the largest ratio of one round.

    Returns the ratio of every other alternative: how many times longer the first takes.
    """
    times: dict[str, list[float]] = {name: [] for name in alternatives}
    for number in range(runs + 1):
        for name, function in alternatives.items():
            start = time.perf_counter()
            result = function()
            elapsed = time.perf_counter() - start
            del result  # its memory goes before the next alternative asks for its own
            if number:
                times[name].append(elapsed)
    base, *others = alternatives
    ratios = {}
    print(title + (f"  (wanted: {wanted})" if wanted else ""))
    for name in others:
        rounds = [a / b for a, b in zip(times[base], times[name], strict=True)]
        ratios[name] = median(times[base]) / median(times[name])
        print(f"  {base} / {name}: {ratios[name]:.2f}  [{min(rounds):.2f} .. {max(rounds):.2f}]")
    return ratios
