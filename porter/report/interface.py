"""The section on the interface: what to wire to the controller."""

from porter.report.page import Block, Items, Section, Table, Text, row, sentence
from porter.sheet.model import TOPICS, Row, Sheet


def interface_section(sheet: Sheet) -> Section:
    """Return the interface sheet, a table for each topic."""
    tables = (_table(topic, [line for line in sheet.rows if line.topic == topic]) for topic in TOPICS)
    blocks: tuple[Block, ...] = (
        Text("What the port needs outside the firmware. The same stands in interface.txt."),
        *(table for table in tables if table.rows),
        Items("Cautions on the sheet", tuple(map(sentence, sheet.cautions))),
    )
    return Section("interface", "Interface sheet", blocks)


def _table(topic: str, lines: list[Row]) -> Table:
    rows = tuple(row(line.item, line.what, line.why, line.source or "–") for line in lines)
    return Table(topic, ("For", "What", "Why", "Source of figures"), rows)
