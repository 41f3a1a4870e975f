"""Two files, member by member: which members differ, where first, and by how much at most."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from qwfx.storage import RawFile, open_raw

__all__ = ["ABOUT_THE_FILE", "FileDifference", "MemberDifference", "compare_files"]

ABOUT_THE_FILE = ("provenance", "digests")
"""Groups that speak of the file and not of the wave function; compared only when asked for."""

BLOCK_BYTES = 1 << 24


@dataclass(frozen=True)
class MemberDifference:
    """One member that is not the same in both files."""

    path: str
    kind: str
    """``only in first``, ``only in second``, ``shape``, ``type``, ``attribute`` or ``values``."""
    first: str
    second: str
    largest: float | None = None
    """Largest absolute difference, where the values can be subtracted."""
    n_different: int = 0
    """Elements beyond the tolerance."""


@dataclass(frozen=True)
class FileDifference:
    """The outcome for two files."""

    differences: tuple[MemberDifference, ...]
    n_same: int
    """Members that agree within the tolerance."""
    n_identical: int
    """Those of them that agree to the bit."""
    left_out: tuple[str, ...]
    """Groups of either file that were not compared."""

    @property
    def same(self) -> bool:
        """Whether no difference was found."""
        return not self.differences


def _walk(outline: dict[str, Any], prefix: str = "") -> Iterator[tuple[str, dict[str, Any]]]:
    yield prefix or "/", outline
    for name, member in outline.get("members", {}).items():
        yield from _walk(member, f"{prefix}/{name}")


def compare_files(
    first: Path, second: Path, *, absolute: float = 0.0, relative: float = 0.0, everything: bool = False
) -> FileDifference:
    """Compare every member of two files.

    Elements a, b agree when ``|a - b| <= absolute + relative * max(|a|, |b|)``; NaN agrees with NaN. Integers and
    text must be equal. Big members are read in blocks.

    Raises FileError or FormatError if a file cannot be read.
    """
    with open_raw(first) as one, open_raw(second) as two:
        trees = [dict(_walk(file.outline)) for file in (one, two)]
        skipped = set() if everything else {f"/{name}" for name in ABOUT_THE_FILE}
        left_out = tuple(sorted(path for path in skipped if path in trees[0] or path in trees[1]))

        def wanted(path: str) -> bool:
            return not any(path == group or path.startswith(group + "/") for group in skipped)

        differences: list[MemberDifference] = []
        same = identical = 0
        for path in sorted(filter(wanted, trees[0].keys() | trees[1].keys())):
            found, to_the_bit = _compare_member(path, trees, (one, two), absolute, relative, everything)
            differences += found
            same += not found
            identical += to_the_bit and not found
    return FileDifference(tuple(differences), same, identical, left_out)


def _describe(member: dict[str, Any]) -> str:
    if member["kind"] == "group":
        return "group"
    return f"{member['dtype']} {tuple(member['shape'])}"


def _compare_member(
    path: str,
    trees: list[dict[str, dict[str, Any]]],
    files: tuple[RawFile, RawFile],
    absolute: float,
    relative: float,
    everything: bool,
) -> tuple[list[MemberDifference], bool]:
    """The differences of one member, and whether it is identical to the bit."""
    a, b = (tree.get(path) for tree in trees)
    if a is None or b is None:
        there = a if a is not None else b
        assert there is not None
        kind = "only in first" if b is None else "only in second"
        text = _describe(there)
        return [MemberDifference(path, kind, text if b is None else "-", text if a is None else "-")], False
    if a["kind"] != b["kind"]:
        return [MemberDifference(path, "type", _describe(a), _describe(b))], False
    differences = _compare_attributes(path, a, b, (absolute, relative), everything)
    if a["kind"] == "group":
        return differences, not differences
    if (a["dtype"] == "string") != (b["dtype"] == "string"):
        return [*differences, MemberDifference(path, "type", _describe(a), _describe(b))], False
    if a["shape"] != b["shape"]:
        return [*differences, MemberDifference(path, "shape", _describe(a), _describe(b))], False
    found, to_the_bit = _compare_values(path, a, files, absolute, relative)
    return differences + found, to_the_bit and not differences


def _compare_attributes(
    path: str, a: dict[str, Any], b: dict[str, Any], tolerance: tuple[float, float], everything: bool
) -> list[MemberDifference]:
    ones, twos = a.get("attributes", {}), b.get("attributes", {})
    differences = []
    for name in sorted(ones.keys() | twos.keys()):
        if path == "/" and name == "content_digest" and not everything:
            continue  # it follows from the members, which are compared themselves
        one, two = (table[name]["value"] if name in table else "-" for table in (ones, twos))
        close = isinstance(one, float) and isinstance(two, float) and not _beyond(one, two, *tolerance)[0]
        if one != two and not close:
            differences.append(MemberDifference(f"{path}@{name}", "attribute", str(one), str(two)))
    return differences


def _compare_values(
    path: str, member: dict[str, Any], files: tuple[RawFile, RawFile], absolute: float, relative: float
) -> tuple[list[MemberDifference], bool]:
    shape = member["shape"]
    rows = shape[0] if shape else 1
    row_bytes = max(16 * int(np.prod(shape[1:], dtype=np.int64)), 1)
    step = max(BLOCK_BYTES // row_bytes, 1)
    largest: float | None = None
    n_different, sample, identical = 0, ("", ""), True
    for start in range(0, rows, step):
        stop = min(start + step, rows)
        one, two = (f.read(path, start, stop) if shape else f.read(path) for f in files)
        bad, size, equal = _beyond(one, two, absolute, relative)
        identical = identical and equal
        if size is not None:
            largest = size if largest is None else max(largest, size)
        if bad.any() and not n_different:
            index = tuple(int(i) for i in np.argwhere(bad)[0]) if shape else ()
            place = ",".join(str(i + (start if axis == 0 else 0)) for axis, i in enumerate(index))
            at = f" at [{place}]" if shape else ""
            sample = (f"{one[index]}{at}", f"{two[index]}{at}")
        n_different += int(bad.sum())
    if not n_different:
        return [], identical
    return [MemberDifference(path, "values", *sample, largest=largest, n_different=n_different)], False


def _beyond(one: Any, two: Any, absolute: float, relative: float) -> tuple[NDArray[np.bool_], float | None, bool]:
    """Where two arrays differ beyond the tolerance, the largest finite difference, and whether they are equal."""
    one, two = np.asarray(one), np.asarray(two)
    if one.dtype.kind not in "fciu" or two.dtype.kind not in "fciu":
        bad = np.asarray(one != two)
        return bad, None, not bad.any()
    if one.dtype.kind in "iu" and two.dtype.kind in "iu":
        # Compared as Python integers would be: uint64 and int64 must not meet in float64.
        bad = np.asarray(one != two)
        largest = max(
            (abs(int(x) - int(y)) for x, y in zip(one[bad][:1000], two[bad][:1000], strict=True)), default=0
        )
        return bad, float(largest), not bad.any()
    with np.errstate(invalid="ignore", over="ignore"):
        distance = np.abs(one - two)
        allowed = absolute + relative * np.maximum(np.abs(one), np.abs(two))
        both_nan = np.isnan(one) & np.isnan(two)
        equal = (one == two) | both_nan
        # No tolerance makes an infinity agree with anything but itself.
        bad = np.asarray(~(equal | ((distance <= allowed) & np.isfinite(distance))))
    finite = distance[np.isfinite(distance)]
    return bad, float(finite.max()) if finite.size else 0.0, bool(equal.all())
