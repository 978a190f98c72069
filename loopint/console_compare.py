"""What `loopint compare` prints."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

from rich import box
from rich.console import Console
from rich.markup import escape
from rich.table import Table

if TYPE_CHECKING:
    from collections.abc import Sequence

    from loopint.pipeline.compare import Comparison

NAMED_ROWS = 3


def show_comparisons(outcomes: Sequence[Comparison], path: Path) -> None:
    """Print verdict, agreement by region, worst points and hints of each comparison."""
    out = Console(highlight=False, soft_wrap=True)
    for outcome in outcomes:
        config = outcome.config
        verdict = "agrees" if outcome.agrees else "DISAGREES"
        out.print(
            f"{config.name}: {verdict} with {config.integral}, eps^{config.order} "
            f"({len(outcome.rows)} of {outcome.total_rows} rows, {outcome.digits} digits asked)"
        )
        table = Table(box=box.SIMPLE)
        for heading in ("region", "rows", "disagree", "digits: worst", "median"):
            table.add_column(heading, justify="left" if heading == "region" else "right")
        for one in outcome.regions():
            table.add_row(
                one.region,
                str(one.rows),
                str(one.disagreeing) if one.disagreeing else "",
                str(one.worst),
                str(one.median),
            )
        out.print(table)
        for row in outcome.disagreeing[:NAMED_ROWS]:
            out.print(
                f"  row {row.row} ({row.region}): yours {_number(row.theirs)}, "
                f"proven {_number(row.proven)}, {row.digits} digits agree"
            )
        for hint in outcome.hints:
            regions = ", ".join(hint.regions)
            out.print(
                f"  hint: {escape(hint.text)}: repairs {hint.rows} of {hint.of_rows} in {regions} "
                f"(to {hint.worst_digits} digits)"
            )
        if outcome.disagreeing and not outcome.hints:
            out.print("  no hint: none of the known mistakes explains it")
        cuts = outcome.undecided_cuts
        if cuts:
            out.print(f"  note: {cuts} value(s) lie on a branch cut that no i0 decides; write + i0")
        for place, reason in outcome.failures[:NAMED_ROWS]:
            out.print(f"  row {place} has no value: {escape(reason)}")
        if len(outcome.failures) > NAMED_ROWS:
            out.print(f"  and {len(outcome.failures) - NAMED_ROWS} more rows without a value")
    out.print(f"point by point: {escape(str(path))}")


def _number(value: Any) -> str:  # noqa: ANN401 - acb
    return f"{float(value.real.mid()):.10g}{float(value.imag.mid()):+.10g}i"


def comparisons_as_dict(outcomes: Sequence[Comparison], path: Path) -> dict[str, Any]:
    """Return the same as JSON-able data."""
    return {
        "file": str(path),
        "comparisons": [
            {
                "name": outcome.config.name,
                "integral": outcome.config.integral,
                "order": outcome.config.order,
                "agrees": outcome.agrees,
                "digits": outcome.digits,
                "rows": len(outcome.rows),
                "undecided_cuts": outcome.undecided_cuts,
                "regions": [vars(one) for one in outcome.regions()],
                "hints": [vars(hint) for hint in outcome.hints],
                "failures": [{"row": row, "reason": reason} for row, reason in outcome.failures],
            }
            for outcome in outcomes
        ],
    }
