"""``qwfx roundtrip``: convert, convert back, compare."""

from __future__ import annotations

import json
import sys
import tempfile
from contextlib import nullcontext
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from qwfx.cli.options import InputFile, as_option, print_notes, set_option, settings
from qwfx.cli.progress import announce_compilation, progress_line
from qwfx.errors import FileError
from qwfx.findings import ExitCode

if TYPE_CHECKING:
    from qwfx.compare.roundtrip import RoundTrip, SetAgreement

__all__ = ["command"]

SHOWN = 12
"""Orbitals printed per set without --verbose: those that came back worst."""


def _points_from(path: Path) -> Any:
    """(N, 3) bohr from a text file of three numbers a line."""
    import numpy as np

    try:
        points = np.loadtxt(path, ndmin=2)
    except (OSError, ValueError) as error:
        raise FileError(
            f"the points cannot be read ({error})", where=str(path), expected="three numbers a line, in bohr",
            remedy="mend the file, or leave --points-file out",
        ) from error  # fmt: skip
    if points.shape[1] != 3 or not len(points):
        raise FileError(
            f"{points.shape[0]} lines of {points.shape[1]} numbers", where=str(path),
            expected="three numbers a line, in bohr", remedy="mend the file, or leave --points-file out",
        )  # fmt: skip
    if not np.isfinite(points).all():
        raise FileError(
            "a coordinate is not a finite number", where=str(path), expected="finite coordinates in bohr",
            remedy="mend the file, or leave --points-file out",
        )  # fmt: skip
    return points


def _print_set(agreement: SetAgreement, verbose: bool) -> None:
    click.echo(f"\norbital set {agreement.name}: ", nl=False)
    if agreement.problem:
        click.echo(agreement.problem)
        return
    orbitals = sorted(agreement.orbitals, key=lambda o: -max(o.relative))
    kinds = {o.freedom for o in orbitals} - {"none"}
    click.echo(f"{len(orbitals)} orbitals, " + (f"{len(kinds)} freedoms undone" if kinds else "no freedom used"))
    click.echo(f"{'orbital':>9}  {'largest difference':^30}   {'relative to the orbital':^30}   freedom")
    click.echo(f"{'':9}" + f"  {'value':>9} {'gradient':>9} {'Laplacian':>10} " * 2)
    shown = orbitals if verbose else orbitals[:SHOWN]
    for o in shown:
        numbers = "  ".join(
            f"{a:9.1e} {b:9.1e} {c:10.1e} " for a, b, c in (o.absolute, o.relative)
        )
        click.echo(f"{o.index:>9}  {numbers}  {o.freedom}")
    if len(shown) < len(orbitals):
        click.echo(f"{'...':>9}  {len(orbitals) - len(shown)} more that came back better (--verbose lists all)")


def _print_text(result: RoundTrip, verbose: bool) -> None:
    click.echo(f"{result.source} ({result.source_format}) -> .qwfx -> {result.through} -> .qwfx")
    click.echo(f"{result.n_points} points ({result.regions}), tolerance {result.tolerance:g}")
    print_notes(result.notes)
    for agreement in result.sets:
        _print_set(agreement, verbose)
    if result.integrals:
        click.echo("\nintegrals, largest difference in hartree")
        for name, size in result.integrals.items():
            click.echo(f"  {name:24} {size:9.1e}")
    for name, size in result.witness.items():
        click.echo(f"\nwitness of {name}: qwfx and the witness's evaluator differ by at most {size:.1e} (relative)")
    for part in result.missing:
        click.echo(f"not carried, and so not compared: {part}")
    verdict = "DIFFERENT" if not result.same else "what came back is the same" if result.missing else "the same"
    click.echo(f"\n{verdict}: worst difference {result.worst:.1e}, tolerance {result.tolerance:g}")


def _to_json(result: RoundTrip) -> dict[str, Any]:
    return {
        "source": result.source, "source_format": result.source_format, "through": result.through,
        "n_points": result.n_points, "points": result.regions, "tolerance": result.tolerance,
        "same": result.same, "worst": result.worst, "missing": list(result.missing), "notes": list(result.notes),
        "integrals": dict(result.integrals), "witness": dict(result.witness),
        "sets": [
            {"name": s.name, "problem": s.problem, "orbitals": [
                {"index": o.index, "freedom": o.freedom, "scale": o.scale, "absolute": o.absolute,
                 "relative": o.relative} for o in s.orbitals]}
            for s in result.sets
        ],
    }  # fmt: skip


@click.command("roundtrip")
@click.argument("source", type=InputFile)
@click.option("--through", metavar="FORMAT", help="Format to go through; by default that of the source.")
@as_option
@set_option
@click.option("--points", "n_points", type=click.IntRange(1, 1_000_000), default=600, show_default=True)
@click.option("--seed", type=click.IntRange(min=0), default=1, show_default=True, help="Chooses other points.")
@click.option(
    "--region", "regions", multiple=True, type=click.Choice(["nuclei", "bonds", "tail"]),
    help="Where the points lie; may be repeated; by default everywhere.",
)  # fmt: skip
@click.option("--points-file", type=InputFile, help="Points of your own: three numbers a line, in bohr.")
@click.option("--tolerance", type=click.FloatRange(min=0), default=1e-9, show_default=True)
@click.option("--keep", type=click.Path(path_type=Path, file_okay=False), help="Folder to keep the files in.")
@click.option("--verbose", is_flag=True, help="List every orbital.")
@click.option("--format", "form", type=click.Choice(["text", "json"]), default="text", show_default=True)
def command(
    source: Path, through: str | None, source_format: str | None, assignments: tuple[str, ...], reading: str | None,
    n_points: int, seed: int, regions: tuple[str, ...], points_file: Path | None, tolerance: float,
    keep: Path | None, verbose: bool, form: str,
) -> None:  # fmt: skip
    """Convert SOURCE to .qwfx, out through a format and back, and compare the orbitals.

    Every orbital's value, gradient and Laplacian are compared at points near the nuclei, in the bonds and in the tail.
    A sign, an order or a rotation among orbitals of equal energy is undone first, and said. Exit code 0: the same
    within the tolerance; 1: different; 2: could not be done.
    """
    from qwfx.compare.roundtrip import roundtrip
    from qwfx.points import REGIONS

    points = _points_from(points_file) if points_file else None
    if keep:
        keep.mkdir(parents=True, exist_ok=True)
    announce_compilation()
    temporary = nullcontext(str(keep)) if keep else tempfile.TemporaryDirectory(prefix="qwfx-")
    with temporary as folder, progress_line() as progress:
        result = roundtrip(
            source, Path(folder), source_format=source_format, options=settings(assignments, reading),
            through=through, n_points=n_points, seed=seed, regions=regions or REGIONS, points=points,
            tolerance=tolerance, progress=progress,
        )  # fmt: skip
    if form == "json":
        click.echo(json.dumps(_to_json(result), indent=2))
    else:
        _print_text(result, verbose)
    sys.exit(ExitCode.OK if result.same else ExitCode.FINDINGS)
