"""Numba functions over rows of points: exponentials, angular parts, radial parts, and their products.

A *row* is a contiguous run of doubles, one per point of a block. Every inner loop runs over the points of a row and
touches few rows, so that LLVM can prove by a handful of run-time checks that they do not overlap, and vectorises it.
Only contraction to fused multiply-add is allowed of the fast-math liberties: the range reduction of the exponential
would not survive reassociation.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

__all__ = ["LARGEST_L", "fill_blocks"]

LARGEST_L = 6
JIT: dict[str, Any] = {
    "cache": True,
    "nogil": True,
    "fastmath": {"contract", "nsz"},
    "error_model": "numpy",
    "boundscheck": False,
}

LOG2_E = 1.4426950408889634
# ln 2 in two parts (Cody and Waite): the first has enough trailing zeros for its product with |k| < 2048 to be exact.
LN2_HIGH = 6.93147180369123816490e-01
LN2_LOW = 1.90821492927058770002e-10
# Adding this number leaves round-to-nearest(x) in the lowest bits of the sum.
ROUNDER = 6755399441055744.0
ONE_BITS = np.int64(1023 << 52)
LEAST = -708.0
"""exp(-708) = 3e-308 is the last normal number; anything below counts as zero."""

# 1/k!, k = 2..13: on |r| <= ln(2)/2 the first term left out is below 5e-18 of the sum.
C2, C3, C4, C5 = 1 / 2, 1 / 6, 1 / 24, 1 / 120
C6, C7, C8, C9 = 1 / 720, 1 / 5040, 1 / 40320, 1 / 362880
C10, C11, C12, C13 = 1 / 3628800, 1 / 39916800, 1 / 479001600, 1 / 6227020800


@intrinsic
def bits_of(_context: Any, _number: Any) -> Any:
    """The 64 bits of a double as an integer."""
    return types.int64(types.float64), lambda c, builder, s, args: builder.bitcast(args[0], ir.IntType(64))


@intrinsic
def from_bits(_context: Any, _number: Any) -> Any:
    """The double that 64 bits stand for."""
    return types.float64(types.int64), lambda c, builder, s, args: builder.bitcast(args[0], ir.DoubleType())


@njit(**JIT)  # type: ignore[untyped-decorator]
def exp_row(factor: float, argument: Any, result: Any, n: int) -> None:
    """``result = exp(-factor * argument)`` for factor * argument >= 0, to about one unit in the last place."""
    for i in range(n):
        wanted = -factor * argument[i]
        x = max(wanted, LEAST)
        shifted = x * LOG2_E + ROUNDER
        k = shifted - ROUNDER
        r = (x - k * LN2_HIGH) - k * LN2_LOW
        high = C8 + r * (C9 + r * (C10 + r * (C11 + r * (C12 + r * C13))))
        low = C2 + r * (C3 + r * (C4 + r * (C5 + r * (C6 + r * C7))))
        r2 = r * r
        fraction = 1.0 + (r + r2 * (low + (r2 * r2 * r2) * high))
        # The lowest bits of `shifted` hold k: moved into the place of the exponent they make 2^k.
        power: float = from_bits((bits_of(shifted) << 52) + ONE_BITS)  # type: ignore[call-arg]
        result[i] = fraction * power if wanted > LEAST else 0.0


@njit(**JIT)  # type: ignore[untyped-decorator]
def solid_rows(
    top: int, derivatives: int, x: Any, y: Any, z: Any, r2: Any, norms: Any, q: Any, ab: Any, ang: Any, n: int
) -> None:
    """Solid harmonics up to degree `top` and their gradients: ``ang[l*l + l + m, 0..3]``.

    With ``Q_lm`` the polar part (``Q_mm = (2m-1)!!``, ``(l-m) Q_lm = (2l-1) z Q_(l-1)m - (l+m-1) r^2 Q_(l-2)m``) and
    ``A_m + i B_m = (x + iy)^m``: ``S_lm = N_lm Q_l|m| A_m`` or ``B_|m|``. Their derivatives follow from
    ``dQ_lm/dz = (l+m) Q_(l-1)m``, ``dQ_lm/dx = -x Q_(l-1)(m+1)`` and ``d(x+iy)^m/dx = m (x+iy)^(m-1)``.
    `q` holds ``Q_lm`` at row l (l+1)/2 + m, `ab` holds A_m at row m and B_m at row LARGEST_L + 1 + m.
    """
    shift = LARGEST_L + 1
    for i in range(n):
        ab[0, i] = 1.0
        ab[shift, i] = 0.0
    for m in range(1, top + 1):
        a0, b0, a1, b1 = ab[m - 1], ab[shift + m - 1], ab[m], ab[shift + m]
        for i in range(n):
            a1[i] = x[i] * a0[i] - y[i] * b0[i]
        for i in range(n):
            b1[i] = x[i] * b0[i] + y[i] * a0[i]
    for m in range(top + 1):
        double_factorial = 1.0
        for k in range(1, m + 1):
            double_factorial *= 2 * k - 1
        row = q[m * (m + 1) // 2 + m]
        for i in range(n):
            row[i] = double_factorial
        for l in range(m + 1, top + 1):
            row, last = q[l * (l + 1) // 2 + m], q[(l - 1) * l // 2 + m]
            up = (2 * l - 1) / (l - m)
            if l - 2 < m:
                for i in range(n):
                    row[i] = up * z[i] * last[i]
            else:
                before = q[(l - 2) * (l - 1) // 2 + m]
                down = (l + m - 1) / (l - m)
                for i in range(n):
                    row[i] = up * z[i] * last[i] - down * r2[i] * before[i]
    for l in range(top + 1):
        for m in range(l + 1):
            norm = norms[l * (l + 1) // 2 + m]
            polar = q[l * (l + 1) // 2 + m]
            for part in range(2 if m else 1):
                plane = ab[m + shift * part]
                rows = ang[l * l + l + (-m if part else m)]
                value = rows[0]
                for i in range(n):
                    value[i] = norm * polar[i] * plane[i]
                if derivatives:
                    _solid_gradient(l, m, part, norm, x, y, polar, plane, q, ab, rows, n)


@njit(**JIT)  # type: ignore[untyped-decorator]
def _solid_gradient(
    l: int, m: int, part: int, norm: float, x: Any, y: Any, polar: Any, plane: Any, q: Any, ab: Any, rows: Any, n: int
) -> None:
    """Gradient of one solid harmonic into rows 1..3."""
    shift = LARGEST_L + 1
    dx, dy, dz = rows[1], rows[2], rows[3]
    if m + 1 <= l - 1:
        inner = q[(l - 1) * l // 2 + m + 1]
        for i in range(n):
            dx[i] = -norm * x[i] * inner[i] * plane[i]
        for i in range(n):
            dy[i] = -norm * y[i] * inner[i] * plane[i]
    else:
        for i in range(n):
            dx[i] = 0.0
        for i in range(n):
            dy[i] = 0.0
    if m:
        # d/dx (A_m, B_m) = m (A_m-1, B_m-1) and d/dy (A_m, B_m) = m (-B_m-1, A_m-1).
        same, other = ab[m - 1 + shift * part], ab[m - 1 + shift * (1 - part)]
        sign = norm * m if part else -norm * m
        for i in range(n):
            dx[i] += norm * m * polar[i] * same[i]
        for i in range(n):
            dy[i] += sign * polar[i] * other[i]
    if m <= l - 1:
        below = q[(l - 1) * l // 2 + m]
        for i in range(n):
            dz[i] = norm * (l + m) * below[i] * plane[i]
    else:
        for i in range(n):
            dz[i] = 0.0


@njit(**JIT)  # type: ignore[untyped-decorator]
def monomial_rows(l: int, derivatives: int, powers: Any, ang: Any, n: int) -> None:
    """Monomials of degree l, gradients and Laplacians: ``ang[row, 0..4]``; `powers[d, p]` is coordinate d to p."""
    row = 0
    for a in range(l, -1, -1):
        for b in range(l - a, -1, -1):
            c = l - a - b
            xa, yb, zc = powers[0, a], powers[1, b], powers[2, c]
            value = ang[row, 0]
            for i in range(n):
                value[i] = xa[i] * yb[i] * zc[i]
            if derivatives:
                for axis in range(3):
                    p = (a, b, c)[axis]
                    one = powers[(axis + 1) % 3, (b, c, a)[axis]]
                    two = powers[(axis + 2) % 3, (c, a, b)[axis]]
                    lowered = powers[axis, max(p - 1, 0)]
                    target = ang[row, 1 + axis]
                    for i in range(n):
                        target[i] = p * lowered[i] * one[i] * two[i]
                    lowered = powers[axis, max(p - 2, 0)]
                    laplacian = ang[row, 4]
                    if axis == 0:
                        for i in range(n):
                            laplacian[i] = 0.0
                    if p > 1:
                        for i in range(n):
                            laplacian[i] += p * (p - 1) * lowered[i] * one[i] * two[i]
            row += 1


@njit(**JIT)  # type: ignore[untyped-decorator]
def gaussian_radial(
    first: int, last: int, scale: Any, decay: Any, exponent_of: Any, e: Any, r2: Any, l: int, w: Any, n: int
) -> None:
    """``R``, ``R'/r`` and ``R'' + 2(l+1) R'/r`` of a Gaussian shell without powers, into rows 0, 1, 2 of `w`.

    The same exponentials serve three sums: S0 = sum c e, S1 = sum -2a c e, S2 = sum 4a^2 c e; the last row is
    ``r^2 S2 + (2l+3) S1``.
    """
    s0, s1, s2 = w[0], w[1], w[2]
    for p in range(first, last):
        c, twice = scale[p], -2.0 * decay[p]
        d, f = c * twice, c * twice * twice
        row = e[exponent_of[p]]
        if p == first:
            for i in range(n):
                s0[i] = c * row[i]
            for i in range(n):
                s1[i] = d * row[i]
            for i in range(n):
                s2[i] = f * row[i]
        else:
            for i in range(n):
                s0[i] += c * row[i]
            for i in range(n):
                s1[i] += d * row[i]
            for i in range(n):
                s2[i] += f * row[i]
    rising = 2.0 * l + 3.0
    for i in range(n):
        s2[i] = r2[i] * s2[i] + rising * s1[i]


@njit(**JIT)  # type: ignore[untyped-decorator]
def general_radial(
    first: int, last: int, scale: Any, decay: Any, power: Any, exponent_of: Any, e: Any, r2: Any, l: int, q: int,
    w: Any, n: int,
) -> None:  # fmt: skip
    """The same three rows for Slater functions and for any powers; at r = 0 they mean nothing.

    With t = q a r^q: ``R'/r = sum c r^(n-2) (n - t) exp``, and
    ``R'' + 2 (l+1) R'/r = sum c r^(n-2) (n (n+2l+1) - (2n+2l+1+q) t + t^2) exp``.
    """
    for i in range(n):
        square = r2[i]
        r = np.sqrt(square)
        inverse_square = 1.0 / square if square > 0.0 else 0.0
        s0 = s1 = s2 = 0.0
        for p in range(first, last):
            a, m = decay[p], power[p]
            u = scale[p] * e[exponent_of[p], i]
            for _ in range(abs(m)):
                u = u * r if m > 0 else u / r
            over = 2.0 * a if q == 2 else a / r if r > 0.0 else 0.0  # t / r^2 without losing digits near the centre
            t = over * square
            rising = m * inverse_square
            s0 += u
            s1 += u * (rising - over)
            s2 += u * ((m + 2 * l + 1) * rising + over * (t - (2 * m + 2 * l + 1 + q)))
        w[0, i] = s0
        w[1, i] = s1
        w[2, i] = s2


@njit(**JIT)  # type: ignore[untyped-decorator]
def product_rows(
    rows: Any, monomial: bool, derivatives: int, w: Any, out: Any, where: int, stride: int, start: int, n: int
) -> None:
    """One function from its angular rows and the radial rows of its shell (w: R, R'/r, L, R'/r times x, y, z)."""
    radial, target, s = w[0], out[where, start : start + n], rows[0]
    for i in range(n):
        target[i] = radial[i] * s[i]
    if derivatives == 0:
        return
    for axis in range(3):
        slope, ds, target = w[3 + axis], rows[1 + axis], out[where + (1 + axis) * stride, start : start + n]
        for i in range(n):
            target[i] = slope[i] * s[i] + radial[i] * ds[i]
    if derivatives == 1:
        return
    bend, target = w[2], out[where + 4 * stride, start : start + n]
    if monomial:
        laplacian = rows[4]
        for i in range(n):
            target[i] = bend[i] * s[i] + radial[i] * laplacian[i]
    else:
        for i in range(n):
            target[i] = bend[i] * s[i]


@njit(**JIT)  # type: ignore[untyped-decorator]
def spherical_rows(y00: float, derivatives: int, w: Any, out: Any, where: int, stride: int, start: int, n: int) -> None:
    """The one function of an s shell: its angular part is a constant."""
    radial, target = w[0], out[where, start : start + n]
    for i in range(n):
        target[i] = radial[i] * y00
    if derivatives == 0:
        return
    for axis in range(3):
        slope, target = w[3 + axis], out[where + (1 + axis) * stride, start : start + n]
        for i in range(n):
            target[i] = slope[i] * y00
    if derivatives == 2:
        bend, target = w[2], out[where + 4 * stride, start : start + n]
        for i in range(n):
            target[i] = bend[i] * y00


@njit(**JIT)  # type: ignore[untyped-decorator]
def fill_blocks(
    points: Any, first_block: int, last_block: int, block: int, centers: Any, atom_shells: Any, atom_exponents: Any,
    unique_exponents: Any, shell_l: Any, shell_monomial: Any, shell_first: Any, shell_simple: Any, scale: Any,
    decay: Any, power: Any, exponent_of: Any, q: int, norms: Any, derivatives: int, xyz: Any, e: Any, w: Any,
    polar: Any, plane: Any, solid: Any, cartesian: Any, monomial: Any, skip: Any, row_of: Any,
    function_stride: int, stride: int, out: Any, shift: int,
) -> None:  # fmt: skip
    """All functions of a basis at some blocks of points; point i goes to column ``i - shift`` of `out`.

    Component c of the function f of shell s goes to row ``row_of[s] + f * function_stride + c * stride``; shells with
    ``skip[block, s]`` are left out. Shells are sorted by atom, see `qwfx.kernels.plan.Plan`. The atoms are the outer
    loop: the rows of one atom are written from end to end before those of the next, which memory likes.
    """
    for atom in range(len(centers)):
        for number in range(first_block, last_block):
            first = number * block
            n = min(block, points.shape[1] - first)
            _fill_atom(
                points, first, n, atom, centers, atom_shells, atom_exponents, unique_exponents, shell_l,
                shell_monomial, shell_first, shell_simple, scale, decay, power, exponent_of, q, norms, derivatives,
                xyz, e, w, polar, plane, solid, cartesian, monomial, skip[number], row_of,
                function_stride, stride, out, first - shift,
            )  # fmt: skip


@njit(**JIT)  # type: ignore[untyped-decorator]
def _fill_atom(
    points: Any, first: int, n: int, atom: int, centers: Any, atom_shells: Any, atom_exponents: Any,
    unique_exponents: Any, shell_l: Any, shell_monomial: Any, shell_first: Any, shell_simple: Any, scale: Any,
    decay: Any, power: Any, exponent_of: Any, q: int, norms: Any, derivatives: int, xyz: Any, e: Any, w: Any,
    polar: Any, plane: Any, solid: Any, cartesian: Any, monomial: Any, skip: Any, row_of: Any,
    function_stride: int, stride: int, out: Any, start: int,
) -> None:  # fmt: skip
    """The functions of one atom at one block of points."""
    s0, s1 = atom_shells[atom], atom_shells[atom + 1]
    top_solid = -1
    top_monomial = -1
    for s in range(s0, s1):
        if not skip[s]:
            if shell_monomial[s]:
                top_monomial = max(top_monomial, shell_l[s])
            else:
                top_solid = max(top_solid, shell_l[s])
    if max(top_solid, top_monomial) < 0:
        return
    x, y, z, r2 = xyz[0], xyz[1], xyz[2], xyz[3]
    for axis in range(3):
        row, c = xyz[axis], centers[atom, axis]
        source = points[axis, first : first + n]
        for i in range(n):
            row[i] = source[i] - c
    for i in range(n):
        r2[i] = x[i] * x[i] + y[i] * y[i] + z[i] * z[i]
    argument = r2
    if q == 1:
        argument = xyz[4]
        for i in range(n):
            argument[i] = np.sqrt(r2[i])
    for k in range(atom_exponents[atom], atom_exponents[atom + 1]):
        exp_row(unique_exponents[k], argument, e[k - atom_exponents[atom]], n)
    if top_solid > 0:
        solid_rows(top_solid, derivatives, x, y, z, r2, norms, polar, plane, solid, n)
    if top_monomial >= 0:
        for axis in range(3):
            for i in range(n):
                cartesian[axis, 0, i] = 1.0
            for p in range(1, top_monomial + 1):
                lower, row, d = cartesian[axis, p - 1], cartesian[axis, p], xyz[axis]
                for i in range(n):
                    row[i] = lower[i] * d[i]
    for s in range(s0, s1):
        if skip[s]:
            continue
        l = shell_l[s]
        if shell_simple[s]:
            gaussian_radial(shell_first[s], shell_first[s + 1], scale, decay, exponent_of, e, r2, l, w, n)
        else:
            general_radial(shell_first[s], shell_first[s + 1], scale, decay, power, exponent_of, e, r2, l, q, w, n)
        if derivatives:
            slope = w[1]
            for axis in range(3):
                row, d = w[3 + axis], xyz[axis]
                for i in range(n):
                    row[i] = slope[i] * d[i]
        where = row_of[s]
        if shell_monomial[s]:
            monomial_rows(l, derivatives, cartesian, monomial, n)
            for f in range((l + 1) * (l + 2) // 2):
                product_rows(monomial[f], True, derivatives, w, out, where + f * function_stride, stride, start, n)
        elif l == 0:
            spherical_rows(norms[0], derivatives, w, out, where, stride, start, n)
        else:
            for f in range(2 * l + 1):
                product_rows(
                    solid[l * l + f], False, derivatives, w, out, where + f * function_stride, stride, start, n
                )
