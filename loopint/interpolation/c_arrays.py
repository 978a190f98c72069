"""Numbers as C source."""

from __future__ import annotations

from collections.abc import Iterable


def order_tag(order: int) -> str:
    """Return an order as part of a name: m1 for -1."""
    return f"m{-order}" if order < 0 else str(order)


def c_array(name: str, values: Iterable[float]) -> str:
    """Return a constant array that holds the same doubles."""
    numbers = [f"{float(value):.17g}" for value in values]
    numbers = [n if any(c in n for c in ".einf") else f"{n}.0" for n in numbers]
    lines = [", ".join(numbers[i : i + 4]) for i in range(0, len(numbers), 4)]
    body = ",\n    ".join(lines)
    return f"static const double {name}[{len(numbers)}] = {{\n    {body}}};"
