"""The compiled loops over pairs of points: exponents, log-sums, entries, draws.

Layout: x (n, d) row after row; vt (d, m) coordinate after coordinate, so that the inner loop runs over targets. Rows
come in chunks `bounds` (c, 2); the columns that take part in chunk c are ``ranges[pointers[c]:pointers[c + 1]]``, all
of them or those near its rows. A row's numbers are packed range after range into a buffer that stays in cache. Every
function works on the chunks first..last and writes only to places that belong to their rows.
"""

from __future__ import annotations

import math

import numpy as np

from .fast_exp import compiled, exponential

__all__ = [
    "count_entries",
    "exponents",
    "fill_entries",
    "log_sum_and_mean",
    "expectation_rows",
    "log_sum_of",
    "log_sum_rows",
    "nearest_cost",
    "sample_targets",
    "top_entries",
]

_TILE = 256


@compiled
def exponents(x, vt, base, ranges, first, rows, out):
    """out[r, c] = base_j - ½|x_(first + r) - v_j|² for the c-th column j in the ranges; returns how many columns.

    Slices are taken before the inner loops: their indices are then known not to be negative, which lets them vectorise.
    """
    d = vt.shape[0]
    packed = 0
    for part in range(ranges.shape[0]):
        last = ranges[part, 1]
        for j0 in range(ranges[part, 0], last, _TILE):
            j1 = min(j0 + _TILE, last)
            width = j1 - j0
            b = base[j0:j1]
            v0 = vt[0, j0:j1]
            v1 = vt[min(1, d - 1), j0:j1]
            for r in range(rows):
                o = out[r, packed : packed + width]
                x0 = x[first + r, 0]
                if d == 1:
                    for j in range(width):
                        e0 = x0 - v0[j]
                        o[j] = b[j] - 0.5 * e0 * e0
                else:
                    x1 = x[first + r, 1]
                    for j in range(width):
                        e0 = x0 - v0[j]
                        e1 = x1 - v1[j]
                        o[j] = b[j] - 0.5 * (e0 * e0 + e1 * e1)
            k = 2
            while k + 4 <= d:
                v0 = vt[k, j0:j1]
                v1 = vt[k + 1, j0:j1]
                v2 = vt[k + 2, j0:j1]
                v3 = vt[k + 3, j0:j1]
                for r in range(rows):
                    o = out[r, packed : packed + width]
                    x0 = x[first + r, k]
                    x1 = x[first + r, k + 1]
                    x2 = x[first + r, k + 2]
                    x3 = x[first + r, k + 3]
                    for j in range(width):
                        e0 = x0 - v0[j]
                        e1 = x1 - v1[j]
                        e2 = x2 - v2[j]
                        e3 = x3 - v3[j]
                        o[j] -= 0.5 * ((e0 * e0 + e1 * e1) + (e2 * e2 + e3 * e3))
                k += 4
            while k < d:
                v0 = vt[k, j0:j1]
                for r in range(rows):
                    o = out[r, packed : packed + width]
                    x0 = x[first + r, k]
                    for j in range(width):
                        e0 = x0 - v0[j]
                        o[j] -= 0.5 * e0 * e0
                k += 1
            packed += width
    return packed


@compiled
def log_sum_of(values, count):
    """log Σ exp(values[:count]), -inf when all are -inf."""
    top = -np.inf
    for j in range(count):
        top = max(top, values[j])
    if top == -np.inf:
        return top
    total = 0.0
    for j in range(count):
        total += exponential(values[j] - top)
    return top + math.log(total)


@compiled
def log_sum_rows(x, vt, log_weights, bounds, pointers, ranges, first, last, buffer, out):
    """out_i = log Σ_j exp(log_weights_j - ½|x_i - v_j|²)."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, 1, buffer)
            out[i] = log_sum_of(buffer[0], count)


@compiled
def log_sum_and_mean(x, vt, log_weights, bounds, pointers, ranges, first, last, buffer, out, mean):
    """As log_sum_rows, and mean_i = the average of v_j under those weights."""
    d = vt.shape[0]
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, 1, buffer)
            row = buffer[0, :count]
            out[i] = log_sum_of(row, count)
            for j in range(count):
                row[j] = exponential(row[j] - out[i])
            for k in range(d):
                total = 0.0
                packed = 0
                for part in range(near.shape[0]):
                    v = vt[k, near[part, 0] : near[part, 1]]
                    weight = row[packed : packed + v.size]
                    for j in range(v.size):
                        total += weight[j] * v[j]
                    packed += v.size
                mean[i, k] = total


@compiled
def expectation_rows(x, vt, log_weights, values, bounds, pointers, ranges, first, last, buffer, out):
    """out[i] = Σ_j w_ij values[:, j] / Σ_j w_ij with w_ij = exp(log_weights_j - ½|x_i - v_j|²); values (k, m)."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, 1, buffer)
            row = buffer[0, :count]
            top = -np.inf
            for j in range(count):
                top = max(top, row[j])
            sum_row = 0.0
            for j in range(count):
                row[j] = exponential(row[j] - top)
                sum_row += row[j]
            for k in range(values.shape[0]):
                total = 0.0
                packed = 0
                for part in range(near.shape[0]):
                    v = values[k, near[part, 0] : near[part, 1]]
                    weight = row[packed : packed + v.size]
                    for j in range(v.size):
                        total += weight[j] * v[j]
                    packed += v.size
                out[i, k] = total / sum_row


@compiled
def nearest_cost(x, vt, zeros, bounds, pointers, ranges, first, last, buffer, out):
    """out_i = min_j ½|x_i - v_j|²."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, zeros, near, i, 1, buffer)
            top = -np.inf
            for j in range(count):
                top = max(top, buffer[0, j])
            out[i] = -top


@compiled
def count_entries(x, vt, p, q, log_cutoff, bounds, pointers, ranges, first, last, buffer, counts):
    """counts_i = how many j have p_i + q_j - ½|x_i - v_j|² above log_cutoff."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, q, near, i, 1, buffer)
            limit = log_cutoff - p[i]
            found = 0
            for j in range(count):
                if buffer[0, j] > limit:
                    found += 1
            counts[i] = found


@compiled
def fill_entries(x, vt, p, q, log_cutoff, bounds, pointers, ranges, first, last, buffer, row_starts, columns, values):
    """Write the entries counted by count_entries in row order."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            exponents(x, vt, q, near, i, 1, buffer)
            limit = log_cutoff - p[i]
            place = row_starts[i]
            packed = 0
            for part in range(near.shape[0]):
                for j in range(near[part, 0], near[part, 1]):
                    if buffer[0, packed] > limit:
                        columns[place] = j
                        values[place] = exponential(p[i] + buffer[0, packed])
                        place += 1
                    packed += 1


@compiled
def sample_targets(x, vt, log_weights, uniforms, row_starts, bounds, pointers, ranges, first, last, buffer, out):
    """For row i, invert the cumulative sum of its weights at uniforms[row_starts[i]:row_starts[i + 1]]."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, 1, buffer)
            row = buffer[0, :count]
            top = log_sum_of(row, count)
            total = 0.0
            for j in range(count):
                total += exponential(row[j] - top)
                row[j] = total
            for k in range(row_starts[i], row_starts[i + 1]):
                wanted = uniforms[k] * total
                low = 0
                high = count - 1
                while low < high:  # first place whose cumulative sum exceeds the wanted value
                    middle = (low + high) // 2
                    if row[middle] > wanted:
                        high = middle
                    else:
                        low = middle + 1
                part = 0
                while low >= near[part, 1] - near[part, 0]:
                    low -= near[part, 1] - near[part, 0]
                    part += 1
                out[k] = near[part, 0] + low


@compiled
def top_entries(x, vt, log_weights, bounds, pointers, ranges, first, last, buffer, targets, values):
    """The largest entries of each row's softmax, sorted from the largest; values are probabilities given the row."""
    wanted = targets.shape[1]
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, 1, buffer)
            total = log_sum_of(buffer[0], count)
            for r in range(wanted):
                targets[i, r] = -1
                values[i, r] = -np.inf
            packed = 0
            for part in range(near.shape[0]):
                for j in range(near[part, 0], near[part, 1]):
                    value = buffer[0, packed]
                    packed += 1
                    if value > values[i, wanted - 1]:
                        r = wanted - 1
                        while r > 0 and value > values[i, r - 1]:
                            values[i, r] = values[i, r - 1]
                            targets[i, r] = targets[i, r - 1]
                            r -= 1
                        values[i, r] = value
                        targets[i, r] = j
            for r in range(wanted):
                values[i, r] = math.exp(values[i, r] - total)
