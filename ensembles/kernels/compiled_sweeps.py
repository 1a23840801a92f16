"""The compiled Sinkhorn sweep: row sums, the update of f and column sums in one reading of the kernel.

See compiled.py for the layout. Four rows go together, so that each target and each column sum is loaded once for the
four. Row sums are near 1 once a solver runs, so the first attempt takes no maximum; a row that over- or underflows is
done again with one.
"""

from __future__ import annotations

import math

import numpy as np

from .compiled import log_sum_of
from .compiled_tiles import TILE, exponents, tile_exponents
from .fast_exp import compiled, exponential, wide_vectors

__all__ = ["count_stored", "fill_stored", "sweep_matrix", "sweep_rows", "sweep_stored"]


@compiled
def add_rows(buffer, factors, rows, ranges, columns):
    """columns_j += Σ_r factors_r buffer[r, c]."""
    wide_vectors()
    packed = 0
    for part in range(ranges.shape[0]):
        target = columns[ranges[part, 0] : ranges[part, 1]]
        width = target.size
        if rows == 4:
            f0, f1, f2, f3 = factors[0], factors[1], factors[2], factors[3]
            b0 = buffer[0, packed : packed + width]
            b1 = buffer[1, packed : packed + width]
            b2 = buffer[2, packed : packed + width]
            b3 = buffer[3, packed : packed + width]
            for j in range(width):
                target[j] += (f0 * b0[j] + f1 * b1[j]) + (f2 * b2[j] + f3 * b3[j])
        else:
            for r in range(rows):
                f0 = factors[r]
                b0 = buffer[r, packed : packed + width]
                for j in range(width):
                    target[j] += f0 * b0[j]
        packed += width


@compiled
def safe_row(row, offset):
    """row_j ← exp(row_j - log Σ exp(row)) from exponents; returns log Σ exp(offset + row)."""
    total = log_sum_of(row)
    if total == -np.inf:
        row[:] = 0.0
        return total
    for j in range(row.size):
        row[j] = exponential(row[j] - total)
    return offset + total


@compiled
def store_row(row, scale, kept):
    """kept = scale * row in single precision."""
    wide_vectors()
    for j in range(row.size):
        kept[j] = np.float32(row[j] * scale)


@compiled
def sweep_rows(
    x, vt, q, log_f, log_a, relaxation, bounds, pointers, ranges, first, last, tile, buffer, new_f, excess,
    columns, stored,
):  # fmt: skip
    """One pass over exp(log_f_i + q_j - ½|x_i - v_j|²); see base.Sweep for what it gives.

    `columns` gathers exp(log a_i + new_f_i + q_j - ½|x_i - v_j|²). If `stored` (n, m) is not empty, the rows scaled to
    sum 1 are kept there.
    """
    factors = np.empty(4)
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        stop = bounds[chunk, 1]
        for begin in range(bounds[chunk, 0], stop, 4):
            rows = min(4, stop - begin)
            count = exponential_rows(x, vt, q, log_f, near, begin, rows, tile, buffer, factors)
            for r in range(rows):
                i = begin + r
                offset = log_f[i]
                row = buffer[r, :count]
                total = factors[r]
                shift = 0.0
                if not (total > 1e-200 and total < 1e200):
                    exponents(x, vt, q, near, i, row)
                    shift = safe_row(row, offset)
                    total = 1.0
                excess[i] = shift + math.log(total)
                new_f[i] = offset - relaxation * excess[i]
                factors[r] = math.exp(min(log_a[i] + new_f[i] - offset + shift, 700.0))
                if stored.shape[0] > 0:
                    store_row(row, 1.0 / total, stored[i])
            add_rows(buffer, factors, rows, near, columns)


@compiled
def exponential_rows(x, vt, q, log_f, ranges, begin, rows, tile, buffer, totals):
    """buffer[r, c] = exp(log_f_i + q_j - ½|x_i - v_j|²) and their sums over the c-th columns, i = begin + r; returns how many.

    Exponents live in a tile that stays in the nearest cache, and are never written anywhere else.
    """
    wide_vectors()
    packed = 0
    totals[:] = 0.0
    for part in range(ranges.shape[0]):
        last = ranges[part, 1]
        for j0 in range(ranges[part, 0], last, TILE):
            width = min(TILE, last - j0)
            tile_exponents(x, vt, q, j0, width, begin, rows, tile)
            for r in range(rows):
                offset = log_f[begin + r]
                place, target, size = np.uintp(r * TILE), np.uintp(packed), np.uintp(width)
                total = 0.0
                for j in range(size):
                    value = exponential(offset + tile[place + j])
                    buffer[r, target + j] = value
                    total += value
                totals[r] += total
            packed += width
    return packed


@compiled
def sweep_matrix(log_kernel, q, log_f, log_a, relaxation, start, stop, buffer, new_f, excess, columns):
    """As sweep_rows, from a stored matrix of log k_ij, which may hold -inf."""
    wide_vectors()
    m = q.size
    row = buffer[0]
    for i in range(start, stop):
        offset = log_f[i]
        kernel_row = log_kernel[i]
        total = 0.0
        for j in range(m):
            value = exponential(offset + q[j] + kernel_row[j])
            row[j] = value
            total += value
        shift = 0.0
        if not (total > 1e-200 and total < 1e200):
            for j in range(m):
                row[j] = q[j] + kernel_row[j]
            shift = safe_row(row, offset)
            if shift == -np.inf:
                excess[i] = shift
                new_f[i] = offset
                continue
            total = 1.0
        excess[i] = shift + math.log(total)
        new_f[i] = offset - relaxation * excess[i]
        factor = math.exp(min(log_a[i] + new_f[i] - offset + shift, 700.0))
        for j in range(m):
            columns[j] += factor * row[j]


@compiled
def sweep_stored(stored, v, u, log_a, relaxation, start, stop, update, excess, columns):
    """One pass over u_i stored_ij v_j: excess_i = log of the row sums, update_i = -relaxation excess_i, and
    columns_j += a_i u_i exp(update_i) stored_ij. Single precision is stored, double precision is summed."""
    wide_vectors()
    m = v.size
    factors = np.empty(4)
    for begin in range(start, stop, 4):
        rows = min(4, stop - begin)
        if rows == 4:
            s0, s1, s2, s3 = stored[begin], stored[begin + 1], stored[begin + 2], stored[begin + 3]
            t0, t1, t2, t3 = 0.0, 0.0, 0.0, 0.0
            for j in range(m):
                vj = v[j]
                t0 += np.float64(s0[j]) * vj
                t1 += np.float64(s1[j]) * vj
                t2 += np.float64(s2[j]) * vj
                t3 += np.float64(s3[j]) * vj
            factors[0], factors[1], factors[2], factors[3] = t0, t1, t2, t3
        else:
            for r in range(rows):
                s0 = stored[begin + r]
                t0 = 0.0
                for j in range(m):
                    t0 += np.float64(s0[j]) * v[j]
                factors[r] = t0
        for r in range(rows):
            i = begin + r
            excess[i] = math.log(factors[r] * u[i])
            update[i] = -relaxation * excess[i]
            factors[r] = math.exp(log_a[i] + update[i]) * u[i]
        if rows == 4:
            f0, f1, f2, f3 = factors[0], factors[1], factors[2], factors[3]
            s0, s1, s2, s3 = stored[begin], stored[begin + 1], stored[begin + 2], stored[begin + 3]
            for j in range(m):
                columns[j] += (f0 * np.float64(s0[j]) + f1 * np.float64(s1[j])) + (
                    f2 * np.float64(s2[j]) + f3 * np.float64(s3[j])
                )
        else:
            for r in range(rows):
                f0 = factors[r]
                s0 = stored[begin + r]
                for j in range(m):
                    columns[j] += f0 * np.float64(s0[j])


@compiled
def count_stored(stored, v, factors, cutoff, start, stop, counts):
    """counts_i = how many j have factors_i stored_ij v_j above cutoff."""
    for i in range(start, stop):
        row = stored[i]
        factor = factors[i]
        found = 0
        for j in range(v.size):
            if factor * row[j] * v[j] > cutoff:
                found += 1
        counts[i] = found


@compiled
def fill_stored(stored, v, factors, cutoff, start, stop, row_starts, columns, values):
    """Write the entries counted by count_stored in row order."""
    for i in range(start, stop):
        row = stored[i]
        factor = factors[i]
        place = row_starts[i]
        for j in range(v.size):
            value = factor * row[j] * v[j]
            if value > cutoff:
                columns[place] = j
                values[place] = value
                place += 1
