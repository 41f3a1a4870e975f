"""The order of functions within a shell of a Molden file, and how it maps to that of FORMAT.md."""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray

__all__ = ["CARTESIAN", "cartesian_powers", "shell_order"]

# The description of the format gives these orders of Cartesian functions.
CARTESIAN = {
    0: ("",),
    1: ("x", "y", "z"),
    2: ("xx", "yy", "zz", "xy", "xz", "yz"),
    3: ("xxx", "yyy", "zzz", "xyy", "xxy", "xxz", "xzz", "yzz", "yyz", "xyz"),
    4: (
        "xxxx", "yyyy", "zzzz", "xxxy", "xxxz", "yyyx", "yyyz", "zzzx", "zzzy", "xxyy", "xxzz", "yyzz", "xxyz",
        "yyxz", "zzxy",
    ),
}  # fmt: skip


def cartesian_powers(l: int) -> list[tuple[int, int, int]]:
    """Powers of x, y, z of the Cartesian functions of a shell, in the file's order."""
    return [(word.count("x"), word.count("y"), word.count("z")) for word in CARTESIAN[l]]


@cache
def shell_order(l: int, cartesian: bool) -> NDArray[np.int64]:
    """``order[k]``: place in the file's shell of function k of our shell.

    Cartesian: ours are sorted by falling powers of x, then y. Spherical: the file has m = 0, +1, -1, +2, -2 ..., and p
    functions as x, y, z, which are m = +1, -1, 0; ours are m = -l ... l.
    """
    if cartesian:
        powers = cartesian_powers(l)
        return np.array(sorted(range(len(powers)), key=lambda k: powers[k], reverse=True))
    if l == 1:
        return np.array([1, 2, 0])
    theirs = [0] + [sign * m for m in range(1, l + 1) for sign in (1, -1)]
    return np.array([theirs.index(m) for m in range(-l, l + 1)])
