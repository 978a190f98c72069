"""Figures as SVG texts that follow the colours of the page."""

from __future__ import annotations

import io
import re
from collections import Counter
from typing import TYPE_CHECKING, Any

import matplotlib as mpl
import numpy as np
from matplotlib.figure import Figure

if TYPE_CHECKING:
    from collections.abc import Sequence

    from matplotlib.axes import Axes

    from loopint.report.run_data import IntegralData, RunData

INK, RE, IM, MARK = "#123456", "#0b78b0", "#cf5b16", "#8a8f98"
STYLE: Any = {  # matplotlib types every key
    "svg.hashsalt": "loopint",  # the same file for the same run
    "svg.fonttype": "none",
    "font.family": "sans-serif",
    "font.size": 10,
    "text.color": INK,
    "axes.edgecolor": INK,
    "axes.labelcolor": INK,
    "xtick.color": INK,
    "ytick.color": INK,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.facecolor": "none",
    "figure.facecolor": "none",
    "legend.frameon": False,
}
MOST_LINES = 400  # fewer points are also joined by lines if p^2 takes each value once


def coefficient_figure(one: IntegralData, rows: np.ndarray) -> tuple[str, str]:
    """Return the curves of all orders of an integral, and what they show in words."""
    shown = [c for c in one.coefficients.values() if c.exact == 0 or c.decades or _varies(c.re)]
    shown = shown or list(one.coefficients.values())[-1:]
    x = rows if one.abscissa is None else one.abscissa
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(7.2, 2.5 * len(shown)), layout="constrained")
        for axes, coefficient in zip(_axes(figure, len(shown)), shown, strict=True):
            re, im = np.concatenate(coefficient.re), np.concatenate(coefficient.im)
            order = np.argsort(x, kind="stable")
            joined = "-" if np.unique(x).size == x.size <= MOST_LINES else ""
            axes.plot(x[order], re[order], joined + ".", color=RE, ms=2.5, lw=1, label="real part")
            if im.any():
                axes.plot(
                    x[order],
                    im[order],
                    joined + ".",
                    color=IM,
                    ms=2.5,
                    lw=1,
                    label="imaginary part",
                )
            for name, place in one.marks:
                axes.axvline(place, color=MARK, lw=0.8, ls="--" if name == "threshold" else ":")
            axes.set_ylabel(rf"coefficient of ε^{coefficient.order}")
            _scale(axes, x)
        axes.set_xlabel(one.label)
        figure.axes[0].legend(loc="best", fontsize=9, markerscale=4)
        text = _svg(figure, f"coefficients of {one.name} over {one.label}")
    marks = sorted({name for name, _ in one.marks}, reverse=True)
    styles = {"threshold": "dashed", "pseudothreshold": "dotted"}
    caption = ", ".join(f"{styles[name]}: {name}" for name in marks)
    return text, caption


def bound_figure(data: RunData) -> str:
    """Return the histogram of relative error bounds of all inexact coefficients."""
    total: Counter[int] = Counter()
    for one in data.integrals:
        for coefficient in one.coefficients.values():
            total.update(coefficient.decades)
    return _bars(
        total,
        "proven bound relative to the coefficient (power of ten)",
        "coefficients",
        "histogram of relative error bounds",
        mark=-float(data.summary["digits"]),
    )


def agreement_figure(data: RunData, asked: int) -> str:
    """Return the histogram of the digits in which table and quadrature agree."""
    return _bars(
        data.agreed,
        "digits in which table and quadrature agree",
        "coefficients",
        "histogram of cross-check agreement",
        mark=float(asked),
    )


def _bars(counts: Counter[int], x_label: str, y_label: str, title: str, mark: float) -> str:
    places = sorted(counts)
    with mpl.rc_context(STYLE):
        figure = Figure(figsize=(7.2, 2.4), layout="constrained")
        axes = figure.subplots()
        axes.bar(places, [counts[n] for n in places], width=0.8, color=RE)
        axes.axvline(mark, color=IM, lw=1.2, ls="--", label="asked")
        axes.set_xlabel(x_label)
        axes.set_ylabel(y_label)
        axes.locator_params(axis="both", integer=True)
        axes.legend(fontsize=9)
        return _svg(figure, title)


def _axes(figure: Figure, count: int) -> Sequence[Axes]:
    return list(np.atleast_1d(figure.subplots(count, 1, sharex=True)))


def _scale(axes: Axes, x: np.ndarray) -> None:
    """Use a scale that shows several decades of p^2, of either sign."""
    sizes = np.abs(x[np.isfinite(x) & (x != 0)])
    if sizes.size and np.median(sizes) < sizes.max() / 300:
        axes.set_xscale("symlog", linthresh=float(np.quantile(sizes, 0.05)))


def _varies(parts: list[np.ndarray]) -> bool:
    values = np.concatenate(parts) if parts else np.zeros(0)
    return bool(values.size and np.ptp(values))


def _svg(figure: Figure, title: str) -> str:
    """Return the figure as an element for a page, in the colours of the page."""
    stream = io.StringIO()
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None})
    text = stream.getvalue()
    text = text[text.index("<svg") :]
    text = re.sub(r"<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    text = re.sub(
        r' width="[\d.]+pt" height="[\d.]+pt"|height="[\d.]+pt" |width="[\d.]+pt" ', "", text
    )
    for colour, variable in ((INK, "currentColor"), (RE, "var(--re)"), (IM, "var(--im)")):
        text = text.replace(colour, variable)
    label = title.replace("&", "&amp;").replace('"', "&quot;").replace("<", "&lt;")
    return text.replace("<svg", f'<svg role="img" aria-label="{label}"', 1)
