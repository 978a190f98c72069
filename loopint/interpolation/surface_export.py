"""Interpolants in p^2 and one mass for other languages: a table and a C header."""

from __future__ import annotations

from typing import TYPE_CHECKING

from loopint.interpolation.c_arrays import c_array, order_tag

if TYPE_CHECKING:
    from loopint.interpolation.surface import SurfaceInterpolant


def as_text(surface: SurfaceInterpolant) -> str:
    """Return the pieces and their Chebyshev coefficients as a plain table."""
    high, low = surface.other_mass
    lines = [
        f"# {surface.name}: {surface.integral}",
        f"# {_conventions(surface)}",
        f"# {surface.region}; t = (m + M)^2, m = {surface.mass_name}, M = {high!r} + {low!r}",
        "# below threshold (side -1) w = sqrt(t - s), above (side 1) w = sqrt(s - t)",
        "# x and y: w and m mapped from [left, right] to [-1, 1]",
        "# coefficient = sum_jk c_jk T_j(x) T_k(y), T_j the Chebyshev polynomials",
        *(
            f"# order {k}: error at most {bound:.3e} over both ranges"
            for k, bound in surface.error_bounds.items()
        ),
        "# order side w_left w_right m_left m_right j k re im",
    ]
    masses = surface.mass_edges
    for order in surface.orders:
        for side, strip in ((-1, surface.below), (1, surface.above)):
            for i in range(len(masses) - 1):
                for piece in range(strip.intervals):
                    ends = (*strip.edges[piece : piece + 2], *masses[i : i + 2])
                    place = " ".join(repr(float(end)) for end in ends)
                    lines += [
                        f"{order} {side} {place} {j} {k} {float(c.real)!r} {float(c.imag)!r}"
                        for j, row in enumerate(strip.coefficients[order][i, piece])
                        for k, c in enumerate(row)
                    ]
    return "\n".join(lines) + "\n"


def _conventions(surface: SurfaceInterpolant) -> str:
    return ", ".join(f"{key} = {value}" for key, value in surface.conventions.items())


TEMPLATE = """\
/* {name}: {integral}
   {conventions}
   Laurent coefficients in eps for p^2 from {low:.17g} to {high:.17g}
   and {mass_name} from {first:.17g} to {last:.17g}.
{errors}
   C99 and C++11; no global state, no allocation.  Do not compile it with options that give up
   IEEE arithmetic.  From Fortran: bind(C) to a function of yours that calls {name}_value, with
   double and integer arguments by value. */

#ifndef LOOPINT_{upper}_H
#define LOOPINT_{upper}_H

#include <math.h>

#define {upper}_SLABS {slabs}
#define {upper}_BELOW {below} /* intervals of w below the threshold */
#define {upper}_ABOVE {above}
#define {upper}_TERMS_W {terms_w}
#define {upper}_TERMS_M {terms_m}

{arrays}

static inline int {name}_interval(const double *edges, int count, double value)
{{
    int low = 0, high = count;
    while (high - low > 1) {{
        int middle = (low + high) / 2;
        if (value >= edges[middle]) low = middle; else high = middle;
    }}
    return low;
}}

/* Map [left, right] to [-1, 1]. */
static inline double {name}_scaled(double value, double left, double right)
{{
    double x = (value - (left + right) / 2) / ((right - left) / 2);
    return x > 1.0 ? 1.0 : x < -1.0 ? -1.0 : x;
}}

/* Return 0 and store the coefficient of eps^order and its derivatives by p^2 and by the mass, or
   return 1 outside the ranges or for an order that is not here.  At threshold the derivatives are
   infinite. */
static inline int {name}_value(int order, double p_squared, double mass, double *re, double *im,
                               double *re_slope, double *im_slope,
                               double *re_mass_slope, double *im_mass_slope)
{{
    const double *edges, *c[2];
    double t[{upper}_TERMS_M], ts[{upper}_TERMS_M];
    double a, back, b, p, e, distance, w, x, y, half_w, half_m, sign, value[2], by_w[2], by_m[2];
    int slab, count, piece, below, part, j, k;
    if (!(p_squared >= {low:.17g} && p_squared <= {high:.17g})) return 1;
    if (!(mass >= {first:.17g} && mass <= {last:.17g})) return 1;
    /* (mass + M)^2 - p_squared in twice the precision */
    a = mass + {other_high:.17g};
    back = a - mass;
    b = (mass - (a - back)) + ({other_high:.17g} - back) + ({other_low:.17g});
    p = a * a;
    e = fma(a, a, -p);
    distance = ((p - p_squared) + e) + (2.0 * a + b) * b;
    below = ({upper}_BELOW && distance > 0.0) || !{upper}_ABOVE;
    w = sqrt(fabs(distance));
    edges = below ? {name}_below : {name}_above;
    count = below ? {upper}_BELOW : {upper}_ABOVE;
    slab = {name}_interval({name}_masses, {upper}_SLABS, mass);
    piece = {name}_interval(edges, count, w);
    x = {name}_scaled(w, edges[piece], edges[piece + 1]);
    y = {name}_scaled(mass, {name}_masses[slab], {name}_masses[slab + 1]);
    half_w = (edges[piece + 1] - edges[piece]) / 2;
    half_m = ({name}_masses[slab + 1] - {name}_masses[slab]) / 2;
    piece += slab * count + (below ? 0 : {upper}_SLABS * {upper}_BELOW);
    switch (order) {{
{cases}
    default: return 1;
    }}
    t[0] = 1.0; ts[0] = 0.0; /* T_k(y) and its derivative */
    t[1] = y; ts[1] = 1.0;
    for (k = 2; k < {upper}_TERMS_M; ++k) {{
        t[k] = 2.0 * y * t[k - 1] - t[k - 2];
        ts[k] = 2.0 * y * ts[k - 1] - ts[k - 2] + 2.0 * t[k - 1];
    }}
    for (part = 0; part < 2; ++part) {{ /* Clenshaw in x, with the derivatives */
        double v = 0.0, v1 = 0.0, s = 0.0, s1 = 0.0, m = 0.0, m1 = 0.0, next, row, row_slope;
        for (j = {upper}_TERMS_W - 1; j >= 0; --j) {{
            row = row_slope = 0.0;
            for (k = 0; k < {upper}_TERMS_M; ++k) {{
                double one = c[part][(piece * {upper}_TERMS_W + j) * {upper}_TERMS_M + k];
                row += one * t[k];
                row_slope += one * ts[k];
            }}
            if (j == 0) break;
            next = 2.0 * x * s - s1 + 2.0 * v; s1 = s; s = next;
            next = 2.0 * x * v - v1 + row; v1 = v; v = next;
            next = 2.0 * x * m - m1 + row_slope; m1 = m; m = next;
        }}
        value[part] = x * v - v1 + row;
        by_w[part] = (x * s - s1 + v) / half_w;
        by_m[part] = (x * m - m1 + row_slope) / half_m;
    }}
    sign = below ? -1.0 : 1.0;
    *re = value[0];
    *im = value[1];
    *re_slope = by_w[0] * sign / (2.0 * w);
    *im_slope = by_w[1] * sign / (2.0 * w);
    *re_mass_slope = by_m[0] - by_w[0] * sign * a / w;
    *im_mass_slope = by_m[1] - by_w[1] * sign * a / w;
    return 0;
}}

#endif
"""


def as_c(surface: SurfaceInterpolant) -> str:
    """Return a header that evaluates the interpolant and its derivatives."""
    name, upper = surface.name, surface.name.upper()
    strips = (surface.below, surface.above)
    strip = surface.below if surface.below.intervals else surface.above
    terms = strip.coefficients[surface.orders[0]].shape[2:]
    arrays = [
        c_array(f"{name}_masses", surface.mass_edges),
        *(
            c_array(f"{name}_{side}", one.edges if one.intervals else [0.0])
            for side, one in zip(("below", "above"), strips, strict=True)
        ),
    ]
    cases = []
    for order in surface.orders:
        tag = order_tag(order)
        values = [c for one in strips for c in one.coefficients[order].ravel()]
        arrays.append(c_array(f"{name}_re_{tag}", (c.real for c in values)))
        arrays.append(c_array(f"{name}_im_{tag}", (c.imag for c in values)))
        cases.append(f"    case {order}: c[0] = {name}_re_{tag}; c[1] = {name}_im_{tag}; break;")
    errors = "\n".join(
        f"   order {k}: error at most {bound:.3e} (for the Python evaluation; proven)"
        for k, bound in surface.error_bounds.items()
    )
    return TEMPLATE.format(
        name=name,
        upper=upper,
        integral=surface.integral,
        conventions=_conventions(surface),
        low=surface.range[0],
        high=surface.range[1],
        mass_name=surface.mass_name,
        first=surface.mass_range[0],
        last=surface.mass_range[1],
        errors=errors,
        slabs=len(surface.mass_edges) - 1,
        below=surface.below.intervals,
        above=surface.above.intervals,
        terms_w=terms[0],
        terms_m=terms[1],
        arrays="\n".join(arrays),
        cases="\n".join(cases),
        other_high=surface.other_mass[0],
        other_low=surface.other_mass[1],
    )
