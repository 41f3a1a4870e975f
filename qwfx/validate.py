"""Is this file right? Runs the rules over one file and says what was run, skipped, not evaluated, broken and found."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from difflib import get_close_matches
from pathlib import Path

from qwfx.errors import FileError, FormatError, QwfxError, UnsupportedError
from qwfx.findings import Report
from qwfx.rules import PURPOSES, TIERS, Rule, all_rules
from qwfx.rules.engine import run_rules
from qwfx.rules.inspection import Inspection, RawFile
from qwfx.rules.registry import foundation

__all__ = ["validate"]


def validate(
    path: str | Path,
    *,
    purpose: str = "auto",
    rules: Iterable[str] | None = None,
    skip: Iterable[str] = (),
    progress: Callable[[str, float], None] | None = None,
) -> Report:
    """Check one file.

    Parameters
    ----------
    path : the file.
    purpose : ``orbitals``, ``trial`` or ``hamiltonian``: what the file is to be used for, which decides what it must
        hold and which rules apply. ``auto`` takes the purpose that its members allow and applies every rule.
    rules : names of rules or tiers to run, with those that they rest on; None for all.
    skip : names of rules or tiers to leave out.
    progress : called with the name of the phase and the fraction done.

    Returns
    -------
    The report. A file that cannot be checked at all gives a report with `failure` set, not an exception.

    Raises
    ------
    UnsupportedError : an unknown purpose or name of a rule.
    """
    from qwfx.storage import open_raw

    if purpose != "auto" and purpose not in PURPOSES:
        raise UnsupportedError(f"no purpose is called {purpose!r}", where="validate", expected=", ".join(PURPOSES))
    wanted = _names(rules) if rules is not None else None
    unwanted = _names(skip)
    try:
        with open_raw(Path(path)) as raw:
            return _check(str(path), raw, purpose, wanted, unwanted, progress)
    except (FileError, FormatError, OSError) as fault:
        text = str(fault) if isinstance(fault, QwfxError) else f"{path}: {fault}"
        return Report(str(path), purpose, failure=text)


def _check(
    name: str,
    raw: RawFile,
    purpose: str,
    wanted: frozenset[str] | None,
    unwanted: frozenset[str],
    progress: Callable[[str, float], None] | None,
) -> Report:
    notes = []
    chosen = purpose
    if purpose == "auto":
        chosen = _purpose_of(raw)
        notes.append(f"purpose {chosen}, chosen by what the file holds; every rule applies")
    skipped = _skipped(None if purpose == "auto" else purpose, wanted, unwanted)
    if wanted is not None:
        added = [r.name for r in all_rules() if r.name not in skipped and r.name not in wanted]
        if added:
            notes.append(f"also run, because the chosen rules rest on them: {', '.join(added)}")
    results = run_rules(Inspection(raw, chosen, progress), all_rules(), skipped)
    root = raw.attributes("/")
    return Report(
        name,
        chosen,
        format_version=str(root.get("version", "")),
        content_digest=str(root.get("content_digest", "")),
        results=results,
        notes=tuple(notes),
    )


def _purpose_of(raw: RawFile) -> str:
    """The most demanding purpose that the members of the file allow."""
    if raw.has("/expansion"):
        return "trial"
    if raw.has("/hamiltonian") and not raw.has("/orbitals"):
        return "hamiltonian"
    return "orbitals"


def _names(words: Iterable[str]) -> frozenset[str]:
    """Names of rules from names of rules and tiers."""
    by_name: dict[str, Rule] = {r.name: r for r in all_rules()}
    result: set[str] = set()
    for word in words:
        if word in TIERS:
            result.update(r.name for r in by_name.values() if r.tier == word)
        elif word in by_name:
            result.add(word)
        else:
            near = get_close_matches(word, [*TIERS, *by_name], n=3, cutoff=0.4)
            raise UnsupportedError(
                f"no rule or tier is called {word!r}",
                where="validate",
                expected=f"perhaps {' or '.join(near)}" if near else f"a tier ({', '.join(TIERS)}) or a rule",
                remedy="`qwfx explain` lists the rules",
            )
    return frozenset(result)


def _skipped(purpose: str | None, wanted: frozenset[str] | None, unwanted: frozenset[str]) -> dict[str, str]:
    """The reason for each rule that is not to run."""
    needed = None
    if wanted is not None:
        needed = wanted.union(*(foundation(name) for name in wanted)) if wanted else wanted
    reasons = {}
    for entry in all_rules():
        if entry.name in unwanted:
            reasons[entry.name] = "left out on request"
        elif needed is not None and entry.name not in needed:
            reasons[entry.name] = "not among the rules asked for"
        elif purpose is not None and purpose not in entry.purposes and not _rested_on(entry.name, purpose):
            reasons[entry.name] = f"not for purpose {purpose}"
    return reasons


def _rested_on(name: str, purpose: str) -> bool:
    """Whether a rule that is for `purpose` rests on rule `name`."""
    return any(purpose in other.purposes and name in foundation(other.name) for other in all_rules())
