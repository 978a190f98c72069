"""Interpolants for other languages: a table of coefficients and a C header."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path
from typing import TYPE_CHECKING

from loopint.interpolation import surface_export
from loopint.interpolation.c_arrays import c_array, order_tag
from loopint.interpolation.interpolant import Interpolant

if TYPE_CHECKING:
    from loopint.interpolation.surface import SurfaceInterpolant


def write_exports(
    interpolant: Interpolant | SurfaceInterpolant, directory: Path, exports: Iterable[str]
) -> list[Path]:
    """Write NAME.txt and NAME.h as asked; return their paths."""
    found = []
    for kind in exports:
        path = directory / f"{interpolant.name}{'.h' if kind == 'c' else '.txt'}"
        if isinstance(interpolant, Interpolant):
            content = as_c(interpolant) if kind == "c" else as_text(interpolant)
        elif kind == "c":
            content = surface_export.as_c(interpolant)
        else:
            content = surface_export.as_text(interpolant)
        path.write_text(content, encoding="ascii")
        found.append(path)
    return found


def as_text(interpolant: Interpolant) -> str:
    """Return the pieces and their Chebyshev coefficients as a plain table."""
    lines = [
        f"# {interpolant.name}: {interpolant.integral}",
        f"# {_conventions(interpolant)}",
        "# below threshold w = sqrt(t - s), above w = sqrt(s - t); x = (w - centre)/half;",
        "# coefficient = sum_k c_k T_k(x), T_k the Chebyshev polynomials",
        f"# threshold t = {interpolant.threshold[0]!r} + {interpolant.threshold[1]!r}",
        "# order left right centre half k re im",
    ]
    lines += [
        f"# order {k}: error at most {bound:.3e} over the whole range"
        for k, bound in interpolant.error_bounds.items()
    ]
    edges, orders = interpolant.edges, interpolant.orders
    for order in orders:
        for piece, row in enumerate(interpolant.coefficients[order]):
            place = " ".join(
                repr(float(value))
                for value in (
                    edges[piece],
                    edges[piece + 1],
                    interpolant.centres[piece],
                    interpolant.halves[piece],
                )
            )
            lines += [
                f"{order} {place} {k} {float(c.real)!r} {float(c.imag)!r}"
                for k, c in enumerate(row)
            ]
    return "\n".join(lines) + "\n"


def _conventions(interpolant: Interpolant) -> str:
    return ", ".join(f"{key} = {value}" for key, value in interpolant.conventions.items())


TEMPLATE = """\
/* {name}: {integral}
   {conventions}
   Laurent coefficients in eps for p^2 from {low:.17g} to {high:.17g}.
{errors}
   C99 and C++; no global state, no allocation.  From Fortran: bind(C) to a function of yours that
   calls {name}_value, with double and integer arguments by value. */

#ifndef LOOPINT_{upper}_H
#define LOOPINT_{upper}_H

#include <math.h>

#define {upper}_PIECES {pieces}
#define {upper}_TERMS {terms}
#define {upper}_BELOW {below} /* pieces below the threshold */

{arrays}

/* Return 0 and store the coefficient of eps^order and its derivative by p^2, or return 1 outside
   the range or for an order that is not here.  At threshold the derivative is infinite. */
static inline int {name}_value(int order, double p_squared, double *re, double *im,
                               double *re_slope, double *im_slope)
{{
    int low = 0, high = {upper}_PIECES, k;
    double distance, w, x, chain, a = 0.0, b = 0.0, c = 0.0, d = 0.0;
    double as = 0.0, bs = 0.0, cs = 0.0, ds = 0.0, t;
    const double *cr, *ci;
    if (!(p_squared >= {name}_edges[0] && p_squared <= {name}_edges[{upper}_PIECES])) return 1;
    while (high - low > 1) {{
        int middle = (low + high) / 2;
        if (p_squared >= {name}_edges[middle]) low = middle; else high = middle;
    }}
    distance = (p_squared - ({threshold_high:.17g})) - ({threshold_low:.17g});
    if (distance < 0.0 && low >= {upper}_BELOW && low > 0) low = {upper}_BELOW - 1;
    if (distance >= 0.0 && low < {upper}_BELOW && low + 1 < {upper}_PIECES) low = {upper}_BELOW;
    switch (order) {{
{cases}
    default: return 1;
    }}
    w = sqrt(fabs(distance));
    x = (w - {name}_centres[low]) / {name}_halves[low];
    if (x > 1.0) x = 1.0;
    if (x < -1.0) x = -1.0;
    for (k = {upper}_TERMS - 1; k > 0; --k) {{ /* Clenshaw, with the derivative */
        t = 2.0 * x * as - bs + 2.0 * a; bs = as; as = t;
        t = 2.0 * x * cs - ds + 2.0 * c; ds = cs; cs = t;
        t = 2.0 * x * a - b + cr[k]; b = a; a = t;
        t = 2.0 * x * c - d + ci[k]; d = c; c = t;
    }}
    *re = x * a - b + cr[0];
    *im = x * c - d + ci[0];
    chain = (distance < 0.0 ? -0.5 : 0.5) / (w * {name}_halves[low]);
    *re_slope = (x * as - bs + a) * chain;
    *im_slope = (x * cs - ds + c) * chain;
    return 0;
}}

#endif
"""


def as_c(interpolant: Interpolant) -> str:
    """Return a header that evaluates the interpolant and its derivative."""
    name, upper = interpolant.name, interpolant.name.upper()
    pieces = len(interpolant.centres)
    first = interpolant.coefficients[interpolant.orders[0]]
    arrays = [
        c_array(f"{name}_edges", interpolant.edges),
        c_array(f"{name}_centres", interpolant.centres),
        c_array(f"{name}_halves", interpolant.halves),
    ]
    cases = []
    for order in interpolant.orders:
        tag = order_tag(order)
        values = interpolant.coefficients[order]
        arrays.append(c_array(f"{name}_re_{tag}", values.real.ravel()))
        arrays.append(c_array(f"{name}_im_{tag}", values.imag.ravel()))
        place = f"low * {upper}_TERMS"
        pointers = f"cr = {name}_re_{tag} + {place}; ci = {name}_im_{tag} + {place};"
        cases.append(f"    case {order}: {pointers} break;")
    errors = "\n".join(
        f"   order {k}: error at most {bound:.3e} (for the Python evaluation; proven)"
        for k, bound in interpolant.error_bounds.items()
    )
    return TEMPLATE.format(
        name=name,
        upper=upper,
        integral=interpolant.integral,
        conventions=_conventions(interpolant),
        low=interpolant.range[0],
        high=interpolant.range[1],
        errors=errors,
        pieces=pieces,
        terms=first.shape[1],
        arrays="\n".join(arrays),
        cases="\n".join(cases),
        below=interpolant.pieces_below,
        threshold_high=interpolant.threshold[0],
        threshold_low=interpolant.threshold[1],
    )
