"""The figures of a page."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
from matplotlib.colors import Normalize, SymLogNorm
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patheffects import Normal, Stroke
from matplotlib.ticker import FixedLocator
from numpy.typing import NDArray

from loopint.report.svg import IM, MARK, RE, STYLE, as_svg
from loopint.report.table import STEPS, Coefficient

if TYPE_CHECKING:
    from collections import Counter
    from collections.abc import Iterator, Mapping, Sequence

    from matplotlib.axes import Axes

    from loopint.report.scan import Scan

WIDTH = 5.8  # inches
MOST_ORDERS = 4
MOST_MARKS = 16
FEW_POINTS = 60  # of a curve: each is marked
WIDE_RANGE = 300.0  # of numbers whose median is this much smaller than the largest one
DRAWABLE = 1e100  # matplotlib's ticks overflow far beyond
BEHIND = "#c9ccd1"  # both ends of the colour map are seen on it, in light and dark
PARTS = (("real part", RE), ("imaginary part", IM))
DASHES = {"threshold": (0, (4, 2)), "pseudothreshold": (0, (1, 2))}
Real = NDArray[np.float64]


@dataclass
class Drawn:
    """A figure and what a reader should know about it."""

    svg: str
    caption: str


def coefficient_figure(
    name: str, coefficients: Mapping[int, Coefficient], rows: NDArray[np.intp], scan: Scan | None
) -> Drawn:
    """Draw the coefficients of an integral: curves, or maps of p^2 and one other column.

    Parameters
    ----------
    rows
        The sampled source rows.
    scan
        Where they lie; without it the coefficients are drawn over the row number.
    """
    constant = {k: v for k, c in coefficients.items() if (v := c.constant()) is not None}
    drawn = [c for k, c in coefficients.items() if k not in constant]
    notes = [f"{order_text(k)} is {_complex_text(v)} in every row" for k, v in constant.items()]
    if len(drawn) > MOST_ORDERS:
        notes.append(f"{len(drawn) - MOST_ORDERS} higher orders are not drawn")
    drawn = drawn[:MOST_ORDERS]
    shown = [part for c in drawn for part in c.values()] + ([scan.abscissa] if scan else [])
    if not all((np.abs(values) <= DRAWABLE).all() for values in shown):
        notes.append("numbers beyond 10¹⁰⁰ are not drawn")
    svg = ""
    if drawn:
        with mpl.rc_context(STYLE):
            curves = None if scan is None else scan.curves()
            if scan is not None and curves is None and len(scan.parameters) == 1:
                figure = _maps(drawn, scan)
                kind = "maps"
            else:
                figure, more = _curves(drawn, scan, rows.astype(float), curves)
                notes = more + notes
                kind = "curves"
            over = "the row number" if scan is None else scan.label
            svg = as_svg(figure, f"{kind} of the coefficients of {name} over {over}")
    return Drawn(svg, "; ".join(notes))


def bound_figure(bounds: Counter[int], digits: int) -> str:
    """Draw the histogram of relative error bounds of all inexact coefficients."""
    marks = {"rounding to float64": (-53 * np.log10(2), DASHES["pseudothreshold"])}
    if digits <= 15:
        marks["asked"] = (-float(digits), DASHES["threshold"])
    return _bars(
        {(n - 0.5) / STEPS: count for n, count in bounds.items()},
        1 / STEPS,
        "log₁₀ of the proven relative bound",
        "histogram of the proven relative error bounds",
        marks,
    )


def agreement_figure(agreed: Counter[int], asked: int) -> str:
    """Draw the histogram of the digits in which table and quadrature agree."""
    return _bars(
        {float(n): count for n, count in agreed.items()},
        1.0,
        "digits in which table and quadrature agree",
        "histogram of the digits of agreement with the quadrature",
        {"asked": (float(asked), DASHES["threshold"])},
    )


def order_text(order: int) -> str:
    """Return a power of epsilon as one writes it."""
    return "ε" + str(order).translate(str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹"))


def _complex_text(value: complex) -> str:
    re, im = f"{value.real:.6g}", f"{abs(value.imag):.6g}i"
    if not value.imag:
        return re.replace("-", "−")
    sign = "−" if value.imag < 0 else "+"
    return f"{re} {sign} {im}".replace("-", "−") if value.real else f"{sign.strip('+')}{im}"


# Curves -----------------------------------------------------------------------------------------


def _curves(
    drawn: Sequence[Coefficient],
    scan: Scan | None,
    rows: Real,
    curves: list[NDArray[np.intp]] | None,
) -> tuple[Figure, list[str]]:
    """Draw both parts over the abscissa; without curves as dots."""
    x = _drawable(rows if scan is None else scan.abscissa)
    thresholds = {} if scan is None else {k: _drawable(t) for k, t in scan.thresholds.items()}
    marks = {name: np.unique(places[np.isfinite(places)]) for name, places in thresholds.items()}
    if sum(places.size for places in marks.values()) > MOST_MARKS:
        marks = {}
    figure = Figure(figsize=(WIDTH, 0.5 + 2.1 * len(drawn)), layout="constrained")
    shown = [False, False]
    for axes, coefficient in zip(_column(figure, len(drawn)), drawn, strict=True):
        parts = _parts(coefficient)
        for which, values in parts.items():
            shown[which] = True
            colour = PARTS[which][1]
            if curves is None or scan is None:
                _dots(axes, x, values, colour)
            else:
                for n, places in enumerate(curves):
                    opacity = 1 - 0.6 * n / max(1, len(curves) - 1)
                    own = [t[places] for t in thresholds.values()]
                    _curve(axes, x[places], values[places], own, colour, opacity)
        for name, ends in marks.items():
            for place in ends:
                axes.axvline(place, color=MARK, lw=0.9, ls=DASHES[name])
        axes.set_ylabel(order_text(coefficient.order), rotation=0, ha="right", va="center")
        _scale(axes, "y", np.concatenate(list(parts.values())))
        _scale(axes, "x", x)
    axes.set_xlabel("row" if scan is None else scan.label, parse_math=False)
    handles = [
        Line2D([], [], color=c, lw=2, label=n) for (n, c), s in zip(PARTS, shown, strict=True) if s
    ]
    handles += [Line2D([], [], color=MARK, lw=0.9, ls=DASHES[n], label=n) for n in marks]
    figure.legend(handles=handles, loc="outside upper left", ncols=4)
    notes = []
    if scan is not None and curves is not None and len(curves) > 1:
        notes.append(f"curves, strong to pale: {scan.parameter_sets(curves)}")
    elif scan is not None and scan.parameters:
        notes.append(f"every dot is a point; {', '.join(scan.parameters)} vary too")
    return figure, notes


def _curve(
    axes: Axes, x: Real, y: Real, thresholds: Sequence[Real], colour: str, opacity: float
) -> None:
    """Join points by lines, but not across a threshold; points on it, or alone, are dots."""
    finite = np.isfinite(x)
    x, y, side = x[finite], y[finite], np.zeros(np.count_nonzero(finite))
    for places in thresholds:
        side += 3.0 * (x > places[finite]) + (x == places[finite])  # never for nan
    breaks = np.flatnonzero(np.diff(side)) + 1
    for px, py in zip(np.split(x, breaks), np.split(y, breaks), strict=True):
        if px.size > 1 and np.unique(px).size == px.size:
            axes.plot(px, py, color=colour, lw=1.3, alpha=opacity)
        if px.size == 1 or x.size <= FEW_POINTS or np.unique(px).size < px.size:
            _dots(axes, px, py, colour, opacity)


def _dots(axes: Axes, x: Real, y: Real, colour: str, opacity: float = 1.0) -> None:
    """Draw round dots as lines of no length: far shorter in SVG than markers."""
    nothing = np.full(x.size, np.nan)
    places = np.stack([x, x, nothing], axis=1).ravel()
    heights = np.stack([y, y, nothing], axis=1).ravel()
    axes.plot(places, heights, color=colour, lw=2.6, solid_capstyle="round", alpha=opacity)


# Maps -------------------------------------------------------------------------------------------


def _maps(drawn: Sequence[Coefficient], scan: Scan) -> Figure:
    """Draw each part as colours over p^2 and the other column that varies."""
    ((label, ordinate),) = scan.parameters.items()
    x, y = _drawable(scan.abscissa), _drawable(ordinate)
    parts = [
        (f"{order_text(c.order)}, {PARTS[which][0]}", values)
        for c in drawn
        for which, values in _parts(c).items()
    ]
    figure = Figure(figsize=(WIDTH, 0.5 + 2.2 * len(parts)), layout="constrained")
    for axes, (title, values) in zip(_column(figure, len(parts)), parts, strict=True):
        picture = _coloured(axes, x, y, values)
        _scale(axes, "x", x)
        _scale(axes, "y", y)
        limits = axes.get_xlim(), axes.get_ylim()
        for name, places in ((k, _drawable(t)) for k, t in scan.thresholds.items()):
            heights, first = np.unique(y, return_index=True)
            line = Line2D(
                places[first], heights, color="black", lw=1.3, ls=DASHES[name], label=name
            )
            line.set_path_effects([Stroke(linewidth=2.6, foreground="white"), Normal()])
            axes.add_line(line)
        axes.set_xlim(limits[0])
        axes.set_ylim(limits[1])
        axes.set_title(title, loc="left", fontsize=10.5)
        axes.set_ylabel(label, parse_math=False)
        bar = figure.colorbar(picture, ax=axes, pad=0.02, aspect=14)
        bar.outline.set_visible(False)
        if bar.solids is not None:
            bar.solids.set_rasterized(True)
    axes.set_xlabel(scan.label, parse_math=False)
    if scan.thresholds:
        handles, _ = axes.get_legend_handles_labels()
        figure.legend(handles=handles, loc="outside upper left", ncols=4)
    return figure


def _coloured(axes: Axes, x: Real, y: Real, values: Real) -> Any:  # noqa: ANN401 - of matplotlib
    """Draw a full grid as cells, other points as squares."""
    norm = Normalize()
    if _is_wide(values):
        size = float(np.nanmax(np.abs(values)))
        norm = SymLogNorm(max(_small(values), size * 1e-6), vmin=-size, vmax=size)
    colours: dict[str, Any] = {"cmap": "cividis", "norm": norm, "rasterized": True}
    (xs, i), (ys, j) = (np.unique(v, return_inverse=True) for v in (x, y))
    if xs.size * ys.size == x.size and np.unique(i * ys.size + j).size == x.size:
        grid = np.full((ys.size, xs.size), np.nan)
        grid[j, i] = values
        return axes.pcolormesh(xs, ys, grid, shading="nearest", **colours)
    axes.set_facecolor(BEHIND)
    return axes.scatter(x, y, c=values, s=9, marker="s", linewidths=0, **colours)


def _parts(coefficient: Coefficient) -> dict[int, Real]:
    """Return what to draw by place in `PARTS`: the imaginary part only if there is one."""
    re, im = map(_drawable, coefficient.values())
    return {0: re, 1: im} if np.nan_to_num(im).any() else {0: re}


# Scales -----------------------------------------------------------------------------------------


def _drawable(values: Real) -> Real:
    with np.errstate(invalid="ignore"):
        return np.where(np.abs(values) <= DRAWABLE, values, np.nan)


def _sizes(values: Real) -> Real:
    sizes: Real = np.abs(values[np.isfinite(values) & (values != 0)])
    return sizes


def _is_wide(values: Real) -> bool:
    """Whether a linear scale would show most of the numbers as zero."""
    sizes = _sizes(values)
    return bool(sizes.size and np.median(sizes) < sizes.max() / WIDE_RANGE)


def _small(values: Real) -> float:
    """Return the power of ten below most of the numbers."""
    sizes = _sizes(values)
    return float(10.0 ** np.floor(np.log10(np.quantile(sizes, 0.05))))


def _scale(axes: Axes, which: str, values: Real) -> None:
    """Choose a scale that shows numbers of several decades and of either sign."""
    if not _is_wide(values):
        return
    change = axes.set_xscale if which == "x" else axes.set_yscale
    if np.nanmin(values) > 0:
        change("log")
        return
    largest = float(_sizes(values).max())
    linear = max(_small(values), largest * 1e-12)
    change("symlog", linthresh=linear)
    low, high = (int(np.floor(np.log10(size))) for size in (linear, largest))
    decades = 10.0 ** np.arange(high, low, -max(1, -(-(high - low) // 4)))
    axis = axes.xaxis if which == "x" else axes.yaxis
    axis.set_major_locator(FixedLocator([*-decades, 0.0, *decades[::-1]]))


# Histograms -------------------------------------------------------------------------------------


def _bars(
    counts: Mapping[float, int],
    width: float,
    label: str,
    title: str,
    marks: Mapping[str, tuple[float, Any]],
) -> str:
    places = sorted(counts)
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(WIDTH, 2.2), layout="constrained")
        axes = figure.subplots()
        axes.bar(places, [counts[n] for n in places], width=0.9 * width, color=RE)
        for name, (place, dashes) in marks.items():
            axes.axvline(place, color=IM, lw=1.3, ls=dashes, label=name)
        axes.set_xlabel(label)
        axes.set_ylabel("coefficients")
        axes.locator_params(axis="both", integer=True)
        figure.legend(loc="outside upper right", ncols=2)
        return as_svg(figure, title)


def _column(figure: Figure, count: int) -> Iterator[Axes]:
    yield from np.atleast_1d(figure.subplots(count, 1, sharex=True))
