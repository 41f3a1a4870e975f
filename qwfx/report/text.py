"""The report on a terminal: verdict, findings, and what was looked at."""

from __future__ import annotations

from collections.abc import Sequence
from io import StringIO

from rich.console import Console, Group, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

from qwfx.findings import ExitCode, Finding, Outcome, Report, Severity

__all__ = ["finding_text", "render_text", "verdict"]

STYLE = {Severity.ERROR: "bold red", Severity.WARNING: "yellow", Severity.NOTE: "cyan"}
VERDICT_STYLE = {ExitCode.OK: "bold green", ExitCode.FINDINGS: "bold red", ExitCode.FAILED: "bold magenta"}
OUTCOME_STYLE = {
    Outcome.PASSED: "green",
    Outcome.FOUND: "yellow",
    Outcome.SKIPPED: "dim",
    Outcome.NOT_EVALUATED: "dim",
    Outcome.BROKEN: "bold magenta",
}
WIDTH = 100
"""Columns where the output is not a terminal, so that a saved report reads the same everywhere."""


def render_text(reports: Report | Sequence[Report], console: Console | None = None, *, verbose: bool = False) -> None:
    """Print reports on `console` (standard output if None), with a line for all where there are several.

    `verbose` lists every rule with its coverage, and the reasons of those that did not run.
    """
    files = [reports] if isinstance(reports, Report) else list(reports)
    out = console or Console(highlight=False)
    if out.is_terminal:
        _print(files, out, verbose)
        return
    if console is None:
        out = Console(highlight=False, width=WIDTH)
    with out.capture() as captured:
        _print(files, out, verbose)
    # Tables pad their cells; in a saved report blanks at the ends of lines are a nuisance.
    out.file.write("".join(f"{line.rstrip()}\n" for line in captured.get().splitlines()))


def _print(files: Sequence[Report], out: Console, verbose: bool) -> None:
    for i, report in enumerate(files):
        if i:
            out.print()
        head = Text.assemble((report.file, "bold"), ": ", (verdict(report), VERDICT_STYLE[report.exit_code]))
        out.print(head, soft_wrap=True)
        out.print(_body(report, verbose))
    if len(files) > 1:
        out.print()
        out.print(_summary(files), soft_wrap=True)


def finding_text(finding: Finding) -> str:
    """One finding as it stands in the report, as plain text."""
    out = Console(highlight=False, width=WIDTH, file=StringIO())
    with out.capture() as captured:
        out.print(_finding(finding))
    return "".join(f"{line.rstrip()}\n" for line in captured.get().splitlines())


def verdict(report: Report) -> str:
    """One clause: valid or not, and how many findings."""
    if report.failure:
        return "could not be checked"
    found = ", ".join(
        f"{report.count(s)} {s.value}{'s' if report.count(s) != 1 else ''}" for s in Severity if report.count(s)
    )
    broken = sum(r.outcome is Outcome.BROKEN for r in report.results)
    if broken:
        lead = f"not fully checked: {broken} rule{'s' if broken > 1 else ''} broke"
        return f"{lead}; {found}" if found else lead
    word = "not valid" if report.count(Severity.ERROR) else "valid"
    return f"{word} for purpose {report.purpose}: {found or 'no findings'}"


def _body(report: Report, verbose: bool) -> RenderableType:
    if report.failure:
        return Padding(Text(report.failure), (0, 0, 0, 2), expand=False)
    parts: list[RenderableType] = [Padding(Text(n, style="dim"), (0, 0, 0, 2), expand=False) for n in report.notes]
    for finding in report.findings:
        parts += [Text(""), _finding(finding)]
    parts += [Text(""), _every_rule(report) if verbose else _tiers(report)]
    if not verbose:
        parts += [Text(line, style="dim") for line in _hints(report)]
    return Group(*parts)


def _finding(finding: Finding) -> RenderableType:
    several = f"  ({finding.count} places)" if finding.count > 1 else ""
    head = Text.assemble(
        (finding.severity.value, STYLE[finding.severity]), "  ", (finding.rule, "bold"), f"  {finding.where}{several}"
    )
    grid = Table.grid(padding=(0, 1))
    grid.add_column(style="dim", no_wrap=True)
    grid.add_column(overflow="fold")
    grid.add_row("expected", Text(finding.expected))
    grid.add_row("found", Text(finding.found))
    grid.add_row("to do", Text(finding.remedy))
    return Group(head, Padding(grid, (0, 0, 0, 2), expand=False))


def _tiers(report: Report) -> RenderableType:
    """How many rules of each tier did what, and the figures of the tiers that compute."""
    table = _table("tier", "run", "found", "skipped", "not evaluated", "broken")
    for tier in dict.fromkeys(r.tier for r in report.results):
        rules = [r for r in report.results if r.tier == tier]
        n = {outcome: sum(r.outcome is outcome for r in rules) for outcome in Outcome}
        shown = (Outcome.FOUND, Outcome.SKIPPED, Outcome.NOT_EVALUATED, Outcome.BROKEN)
        counts = (n[Outcome.PASSED] + n[Outcome.FOUND], *(n[outcome] for outcome in shown))
        table.add_row(tier, *(str(count or ".") for count in counts))
    figures = [r for r in report.results if r.measured and r.tier in ("algebra", "witness", "digests")]
    if not figures:
        return table
    grid = Table.grid(padding=(0, 2, 0, 0))
    grid.add_column(no_wrap=True)
    grid.add_column(overflow="fold")
    for result in figures:
        grid.add_row(result.rule, Text(result.measured))
    return Group(table, Text(""), Text("measured", style="dim"), grid)


def _every_rule(report: Report) -> Table:
    table = _table("rule", "outcome", "what was looked at, measured, or why not")
    tier = ""
    for result in report.results:
        if result.tier != tier:
            tier = result.tier
            table.add_row(Text(tier, style="bold"), "", "")
        said = "; ".join(x for x in (result.coverage, result.measured, result.reason) if x)
        outcome = result.outcome.value.replace("-", " ")
        table.add_row(f"  {result.rule}", Text(outcome, style=OUTCOME_STYLE[result.outcome]), Text(said))
    return table


def _table(*columns: str) -> Table:
    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    for name in columns:
        number = name in ("run", "found", "skipped", "broken", "not evaluated")
        table.add_column(
            name,
            justify="right" if number else "left",
            no_wrap=number or name in ("tier", "rule", "outcome"),
            overflow="fold",
        )
    return table


def _hints(report: Report) -> list[str]:
    lines = [
        f"{r.rule} broke: {r.reason}; this is a fault of qwfx, please report it"
        for r in report.results
        if r.outcome is Outcome.BROKEN
    ]
    blocked = [r for r in report.results if r.outcome is Outcome.NOT_EVALUATED and r.reason.startswith("rule ")]
    if blocked:
        lines.append(f"not evaluated because of earlier findings: {', '.join(r.rule for r in blocked)}")
    if report.findings:
        lines.append(f"`qwfx explain {report.findings[0].rule}` tells more; --verbose lists every rule")
    return lines


def _summary(files: Sequence[Report]) -> Text:
    n = {code: sum(r.exit_code is code for r in files) for code in ExitCode}
    words = ((ExitCode.OK, "valid"), (ExitCode.FINDINGS, "not valid"), (ExitCode.FAILED, "not checked in full"))
    text = Text(f"{len(files)} files: ")
    text.append(
        ", ".join(f"{n[code]} {word}" for code, word in words if n[code]),
        style=VERDICT_STYLE[max(r.exit_code for r in files)],
    )
    return text
