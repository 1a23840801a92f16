"""The innermost loops: exponents -½|x_i - v_j|² of up to four rows and a tile of columns.

Layout: x row after row; vt (d, m) coordinate after coordinate, so that the inner loops run over targets. There are two ways,
told apart by the width of x:

- x (n, d): differences, squared and added, which lose nothing however far the clouds lie from the origin;
- x (n, d + 1), last column -½|x_i|²: products. Then base_j holds -½|v_j|² as well, and the exponent is
  base_j - ½|x_i|² + x_i·v_j: half the work of differences, with a rounding error of about 1e-16 times the larger of |x|²
  and |v|².

Two things let the compiler use vectors. A tile holds its rows at a fixed distance, which shows that they do not overlap; and
inner loops count without a sign, which shows that no index is meant from the end. (Slices would do as well, but counting
their references takes longer than the work on a short tile.)
"""

from __future__ import annotations

import numpy as np

from .fast_exp import compiled, wide_vectors

__all__ = ["TILE", "exponents", "tile_exponents"]

TILE = 256


@compiled
def tile_exponents(x, vt, base, j0, width, first, rows, tile):
    """tile[r * TILE + c] = base_j - ½|x_(first + r) - v_j|² for j = j0 + c, c < width ≤ TILE, r < rows ≤ 4."""
    wide_vectors()
    d = vt.shape[0]
    begin, size = np.uintp(j0), np.uintp(width)
    if x.shape[1] > d:
        if rows == 4:
            _products(x, vt, base, begin, size, first, tile)
        else:
            for r in range(rows):
                _products_of_row(x, vt, base, begin, size, first + r, tile, np.uintp(r * TILE))
        return
    for r in range(rows):
        i = first + r
        place = np.uintp(r * TILE)
        x0 = x[i, 0]
        if d == 1:
            for j in range(size):
                e0 = x0 - vt[0, begin + j]
                tile[place + j] = base[begin + j] - 0.5 * e0 * e0
        else:
            x1 = x[i, 1]
            for j in range(size):
                e0 = x0 - vt[0, begin + j]
                e1 = x1 - vt[1, begin + j]
                tile[place + j] = base[begin + j] - 0.5 * (e0 * e0 + e1 * e1)
        for k in range(2, d):
            x0 = x[i, k]
            for j in range(size):
                e0 = x0 - vt[k, begin + j]
                tile[place + j] -= 0.5 * e0 * e0


@compiled
def _products(x, vt, base, begin, size, i, tile):
    """tile[r * TILE + c] = base_j + x_(i + r, d) + x_(i + r)·v_j, j = begin + c, for four rows at once.

    Each v_j is loaded once for the four rows, and each pass over the tile takes four coordinates.
    """
    wide_vectors()
    d = vt.shape[0]
    one, two, three = np.uintp(TILE), np.uintp(2 * TILE), np.uintp(3 * TILE)
    for k in range(0, d - 3, 4):
        a0, a1, a2, a3 = x[i, k], x[i, k + 1], x[i, k + 2], x[i, k + 3]
        b0, b1, b2, b3 = x[i + 1, k], x[i + 1, k + 1], x[i + 1, k + 2], x[i + 1, k + 3]
        c0, c1, c2, c3 = x[i + 2, k], x[i + 2, k + 1], x[i + 2, k + 2], x[i + 2, k + 3]
        d0, d1, d2, d3 = x[i + 3, k], x[i + 3, k + 1], x[i + 3, k + 2], x[i + 3, k + 3]
        if k == 0:
            a, b, c, e = x[i, d], x[i + 1, d], x[i + 2, d], x[i + 3, d]
            for j in range(size):
                p0, p1, p2, p3 = vt[k, begin + j], vt[k + 1, begin + j], vt[k + 2, begin + j], vt[k + 3, begin + j]
                p = base[begin + j]
                tile[j] = (p + a) + ((a0 * p0 + a1 * p1) + (a2 * p2 + a3 * p3))
                tile[j + one] = (p + b) + ((b0 * p0 + b1 * p1) + (b2 * p2 + b3 * p3))
                tile[j + two] = (p + c) + ((c0 * p0 + c1 * p1) + (c2 * p2 + c3 * p3))
                tile[j + three] = (p + e) + ((d0 * p0 + d1 * p1) + (d2 * p2 + d3 * p3))
        else:
            for j in range(size):
                p0, p1, p2, p3 = vt[k, begin + j], vt[k + 1, begin + j], vt[k + 2, begin + j], vt[k + 3, begin + j]
                tile[j] += (a0 * p0 + a1 * p1) + (a2 * p2 + a3 * p3)
                tile[j + one] += (b0 * p0 + b1 * p1) + (b2 * p2 + b3 * p3)
                tile[j + two] += (c0 * p0 + c1 * p1) + (c2 * p2 + c3 * p3)
                tile[j + three] += (d0 * p0 + d1 * p1) + (d2 * p2 + d3 * p3)
    k = d - d % 4
    if k + 2 <= d:
        a0, a1, b0, b1 = x[i, k], x[i, k + 1], x[i + 1, k], x[i + 1, k + 1]
        c0, c1, d0, d1 = x[i + 2, k], x[i + 2, k + 1], x[i + 3, k], x[i + 3, k + 1]
        for j in range(size):
            p0, p1 = vt[k, begin + j], vt[k + 1, begin + j]
            tile[j] += a0 * p0 + a1 * p1
            tile[j + one] += b0 * p0 + b1 * p1
            tile[j + two] += c0 * p0 + c1 * p1
            tile[j + three] += d0 * p0 + d1 * p1
        k += 2
    if k < d:
        a0, b0, c0, d0 = x[i, k], x[i + 1, k], x[i + 2, k], x[i + 3, k]
        for j in range(size):
            p0 = vt[k, begin + j]
            tile[j] += a0 * p0
            tile[j + one] += b0 * p0
            tile[j + two] += c0 * p0
            tile[j + three] += d0 * p0


@compiled
def _products_of_row(x, vt, base, begin, size, i, tile, place):
    """As _products, for one row."""
    wide_vectors()
    d = vt.shape[0]
    c = x[i, d]
    for j in range(size):
        tile[place + j] = base[begin + j] + c
    for k in range(0, d - 3, 4):
        a0, a1, a2, a3 = x[i, k], x[i, k + 1], x[i, k + 2], x[i, k + 3]
        for j in range(size):
            first, second = a0 * vt[k, begin + j] + a1 * vt[k + 1, begin + j], a2 * vt[k + 2, begin + j]
            tile[place + j] += first + (second + a3 * vt[k + 3, begin + j])
    for k in range(d - d % 4, d):
        a0 = x[i, k]
        for j in range(size):
            tile[place + j] += a0 * vt[k, begin + j]


@compiled
def exponents(x, vt, base, ranges, i, out):
    """out_c = base_j - ½|x_i - v_j|² for the c-th column j in the ranges; returns how many columns."""
    packed = 0
    for part in range(ranges.shape[0]):
        last = ranges[part, 1]
        for j0 in range(ranges[part, 0], last, 4 * TILE):
            width = min(4 * TILE, last - j0)
            tile_exponents(x, vt, base, j0, width, i, 1, out[packed : packed + width])
            packed += width
    return packed
