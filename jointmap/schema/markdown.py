"""Documentation of the tables, written from their definition."""

from __future__ import annotations

from collections.abc import Sequence

from jointmap.schema.columns import Table
from jointmap.schema.inputs import INPUT_TABLES
from jointmap.schema.outputs import OUTPUT_TABLES

_HEAD = "| column | type | unit | needed | dimension | meaning |\n|---|---|---|---|---|---|"


def table_markdown(table: Table) -> str:
    """One table as a markdown section."""
    lines = [f"### {table.name}", "", f"`{table.file}`: {table.meaning}.", "", _HEAD]
    for column in table.columns:
        needed = "required" if column.required else "optional"
        if column.form:
            needed += f" ({column.form} form)"
        dimension = "2, 3" if len(column.dimensions) == 2 else str(column.dimensions[0])
        cells = (f"`{column.name}`", column.dtype, column.unit, needed, dimension, column.meaning)
        lines.append("| " + " | ".join(cells) + " |")
    if table.notes:
        lines += ["", table.notes]
    return "\n".join(lines) + "\n"


def tables_markdown(
    inputs: Sequence[Table] = INPUT_TABLES, outputs: Sequence[Table] = OUTPUT_TABLES
) -> str:
    """All tables as one markdown document."""
    parts = ["# Tables\n", "## Input\n", *map(table_markdown, inputs)]
    parts += ["## Output\n", *map(table_markdown, outputs)]
    return "\n".join(parts)
