"""What `loopint grid` prints."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich import box
from rich.console import Console
from rich.markup import escape
from rich.table import Table

from loopint.pipeline.grid import picture

if TYPE_CHECKING:
    from loopint.pipeline.grid import Grid

WIDEST = 72


def show_grid(grid: Grid) -> None:
    """Print the columns, and where the values lie relative to the thresholds."""
    out = Console(highlight=False, soft_wrap=True)
    table = Table(box=box.SIMPLE)
    for heading in ("column", "values", "from", "to"):
        table.add_column(heading, justify="left" if heading == "column" else "right")
    table.add_row(grid.key, str(grid.rows), "1", str(grid.rows))
    for axis in grid.axes:
        ends = (f"{axis.values.min():.8g}", f"{axis.values.max():.8g}")
        table.add_row(axis.name, str(axis.values.size), *ends)
    for name, value in grid.constants.items():
        table.add_row(name, "1", str(value), str(value))
    out.print(table)
    for axis in grid.axes:
        lines = picture(axis, grid.thresholds, max(20, min(WIDEST, out.width - 4)))
        if lines:
            out.print(f"{axis.name}:")
            for line in lines:
                out.print(f"  {escape(line)}")
    out.print(f"{grid.rows} rows in {escape(str(grid.path))}")
