"""Golden reports: what the validator says of each file of the corpus, compared whole; the pages quote from them.

After a change that is meant, write them anew and read the difference::

    cd tests && python -m corpus.golden
"""

from __future__ import annotations

import json
import re
import tempfile
from pathlib import Path
from typing import Any

from corpus.edits import blocks_of, build
from corpus.valid import VALID

import qwfx.rules
from qwfx.findings import Finding, Severity
from qwfx.report import to_json
from qwfx.report.text import finding_text
from qwfx.rules import all_rules, page_body
from qwfx.validate import validate

GOLDEN = Path(__file__).parent / "golden"
PAGES = Path(qwfx.rules.__file__).parent / "pages"


def cases() -> dict[str, dict[str, str]]:
    """Name of the golden file -> its examples: one for each valid file and one for each rule."""
    result = {f"valid-{name}": {"file": name} for name in VALID}
    for rule in all_rules():
        result[rule.name] = {heading.lower(): text for heading, text in blocks_of(page_body(rule.name)).items()}
    return result


def report_of(text: str, folder: Path) -> dict[str, Any]:
    """The JSON report of one example, without what depends on the machine: path and content digest."""
    report = to_json(validate(build(text, folder / "example.qwfx")))["files"][0]
    report["file"] = "example.qwfx"
    report["content_digest"] = "sealed" if report["content_digest"] else ""
    # Digests of computed numbers may differ between mathematical libraries by the last bit of an exponential.
    return dict(json.loads(re.sub(r"\b(?!0{16})[0-9a-f]{16}\.\.\.", "0123456789abcdef...", json.dumps(report))))


def load(name: str) -> dict[str, dict[str, Any]]:
    """Golden reports of one case: heading -> whole report.

    On disk the report of an example holds the rules whose result differs from that of the valid file it is made from.
    """
    stored = json.loads((GOLDEN / f"{name}.json").read_text(encoding="utf-8"))
    for report in stored.values():
        if base := report.pop("as"):
            changed = {rule["rule"]: rule for rule in report["rules"]}
            report["rules"] = [changed.get(r["rule"], r) for r in load(f"valid-{base}")["file"]["rules"]]
    return dict(stored)


def dump(reports: dict[str, dict[str, Any]], bases: dict[str, str]) -> str:
    """JSON with one line a rule."""
    pieces = []
    for heading, report in reports.items():
        base = bases[heading]
        known = {json.dumps(r) for r in load(f"valid-{base}")["file"]["rules"]} if base else set()
        plain = {"as": base, **{key: value for key, value in report.items() if key != "rules"}}
        head = [f"    {json.dumps(key)}: {json.dumps(value, ensure_ascii=False)}" for key, value in plain.items()]
        rules = [f"      {json.dumps(r, ensure_ascii=False)}" for r in report["rules"] if json.dumps(r) not in known]
        body = ",\n".join([*head, '    "rules": [\n' + ",\n".join(rules) + "\n    ]"])
        pieces.append(f"  {json.dumps(heading)}: {{\n{body}\n  }}")
    return "{\n" + ",\n".join(pieces) + "\n}\n"


def with_finding(page: str, report: dict[str, Any], rule: str) -> str:
    """The page with the first finding that its failing example gives, below the example."""
    found = next(r for r in report["rules"] if r["rule"] == rule)["findings"][0]
    text = finding_text(Finding(rule=rule, **{**found, "severity": Severity(found["severity"])}))
    head, _, rest = page.partition("## Fails\n")
    example, _, tail = rest.partition("## Passes\n")
    block = example.split("```")[1]
    return f"{head}## Fails\n\n```{block}```\n\ngives\n\n```text\n{text}```\n\n## Passes\n{tail}"


def main() -> None:
    """Write all golden reports."""
    GOLDEN.mkdir(exist_ok=True)
    for old in GOLDEN.glob("*.json"):
        old.unlink()
    with tempfile.TemporaryDirectory() as folder:
        for name, examples in cases().items():
            reports = {heading: report_of(text, Path(folder)) for heading, text in examples.items()}
            valid = name.startswith("valid-")
            bases = {heading: "" if valid else text.split()[0] for heading, text in examples.items()}
            (GOLDEN / f"{name}.json").write_text(dump(reports, bases), encoding="utf-8")
            if not valid:
                page = PAGES / f"{name}.md"
                page.write_text(with_finding(page.read_text("utf-8"), reports["fails"], name), encoding="utf-8")


if __name__ == "__main__":
    main()
