"""Documentation of the tables, written from their definition."""

from __future__ import annotations

from collections.abc import Sequence

from jointmap.schema.columns import Column, Table
from jointmap.schema.inputs import INPUT_TABLES
from jointmap.schema.outputs import OUTPUT_TABLES

_HEAD = "| columns | type | unit | needed | dimension | meaning |\n|---|---|---|---|---|---|"


def _facts(column: Column) -> tuple[str, ...]:
    """What is said of a column; columns of which the same is said share a row."""
    needed = "required" if column.required else "optional"
    if column.form:
        needed += f" ({column.form} form)"
    dimension = "2, 3" if len(column.dimensions) == 2 else str(column.dimensions[0])
    return (column.dtype, column.unit, needed, dimension, column.meaning)


def table_markdown(table: Table, level: int = 3) -> str:
    """One table as a markdown section under a heading of this level."""
    lines = [f"{'#' * level} {table.name}", "", f"`{table.file}`: {table.meaning}.", "", _HEAD]
    alike: dict[tuple[str, ...], list[str]] = {}
    for column in table.columns:
        alike.setdefault(_facts(column), []).append(f"`{column.name}`")
    for facts, names in alike.items():
        lines.append("| " + " | ".join((" ".join(names), *facts)) + " |")
    if table.notes:
        lines += ["", table.notes]
    return "\n".join(lines) + "\n"


def tables_markdown(
    inputs: Sequence[Table] = INPUT_TABLES,
    outputs: Sequence[Table] = OUTPUT_TABLES,
    level: int = 1,
) -> str:
    """All tables as one markdown document whose title is a heading of this level."""
    title, half = "#" * level, "#" * (level + 1)
    parts = [f"{title} Tables\n", f"{half} Input\n"]
    parts += [table_markdown(table, level + 2) for table in inputs]
    parts += [f"{half} Output\n", *(table_markdown(table, level + 2) for table in outputs)]
    return "\n".join(parts)
