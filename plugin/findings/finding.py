"""What a finding is, and how findings are shown: a table for people, JSON for scripts."""

from __future__ import annotations

import json
import textwrap
from collections.abc import Iterable
from dataclasses import asdict, dataclass

SEVERITIES = ("error", "warning", "note")
_WIDTH = 118


@dataclass(frozen=True)
class Finding:
    """One thing to know before solving. `code` is a stable word; `cure` says what to do about it."""

    code: str
    severity: str
    subject: str
    message: str
    cure: str = ""


def error(code: str, subject: str, message: str, cure: str) -> Finding:
    """A finding that makes the answer wrong or impossible."""
    return Finding(code, "error", subject, message, cure)


def warning(code: str, subject: str, message: str, cure: str) -> Finding:
    """A finding that makes the answer doubtful."""
    return Finding(code, "warning", subject, message, cure)


def note(code: str, subject: str, message: str, cure: str = "") -> Finding:
    """A figure worth knowing."""
    return Finding(code, "note", subject, message, cure)


def ordered(findings: Iterable[Finding]) -> tuple[Finding, ...]:
    """Errors first, then warnings, then notes; each once."""
    return tuple(sorted(dict.fromkeys(findings), key=lambda finding: SEVERITIES.index(finding.severity)))


def render(findings: Iterable[Finding]) -> str:
    """A table: severity, code and subject; below them what was found, and the cure behind an arrow."""
    blocks = []
    for finding in ordered(findings):
        head = f"{finding.severity.upper():<8} {finding.code:<28} {finding.subject}".rstrip()
        lines = textwrap.wrap(finding.message, _WIDTH, initial_indent="    ", subsequent_indent="    ")
        if finding.cure:
            lines += textwrap.wrap(finding.cure, _WIDTH, initial_indent="    -> ", subsequent_indent="       ")
        blocks.append("\n".join([head, *lines]))
    return "\n".join([*blocks, _count(findings)]) if blocks else ""


def _count(findings: Iterable[Finding]) -> str:
    held = [finding.severity for finding in findings]
    counts = [(held.count(severity), severity) for severity in SEVERITIES]
    return ", ".join(f"{count} {severity}{'s' if count != 1 else ''}" for count, severity in counts)


def as_json(findings: Iterable[Finding]) -> str:
    """A JSON list of objects with code, severity, subject, message and cure."""
    return json.dumps([asdict(finding) for finding in ordered(findings)], indent=1, ensure_ascii=False)
