"""Reports of the validator for people (text), for programs (JSON) and for code-scanning tools (SARIF)."""

from __future__ import annotations

from qwfx.report.json_report import to_json
from qwfx.report.sarif import to_sarif
from qwfx.report.text import render_text

__all__ = ["render_text", "to_json", "to_sarif"]
