"""The sheet as plain text, for the job folder."""

import textwrap

from porter.sheet.model import TOPICS, Row, Sheet

_WIDTH = 100


def render_text(sheet: Sheet) -> str:
    """Return ``interface.txt``: topic by topic, each line with its working and source."""
    lines = [f"Interface sheet: {sheet.title}", ""]
    for finding in sheet.findings:
        lines += _wrapped(f"{finding.severity}: {finding.message}; {finding.mend} ({finding.rule})", "")
    for topic in TOPICS:
        rows = [row for row in sheet.rows if row.topic == topic]
        if rows:
            lines += ["", topic, "-" * len(topic), *(line for row in rows for line in _row(row))]
    lines += [
        "",
        "Cautions",
        "--------",
        *(line for said in sheet.cautions for line in _wrapped(f"- {said}", "  ")),
    ]
    return "\n".join(lines) + "\n"


def _row(row: Row) -> list[str]:
    source = f" [{row.source}]" if row.source else ""
    return [*_wrapped(f"{row.item}: {row.what}", "    "), *_wrapped(f"    {row.why}{source}", "    ")]


def _wrapped(text: str, hang: str) -> list[str]:
    return textwrap.wrap(text, _WIDTH, subsequent_indent=hang, break_on_hyphens=False)
