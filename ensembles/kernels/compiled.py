"""The compiled loops over pairs of points. Every function works on the rows start..stop of x and writes only there.

Layout: x (n, d) row after row; vt (d, m) coordinate after coordinate, so that the inner loop runs over targets. A row's
exponents live in a buffer that stays in cache between the row sum and the column sums.
"""

from __future__ import annotations

import math

import numpy as np

from .fast_exp import compiled, exponential

__all__ = [
    "count_entries",
    "fill_entries",
    "log_sum_and_mean",
    "log_sum_rows",
    "nearest_cost",
    "sample_targets",
    "sweep_rows",
    "top_entries",
]


@compiled
def exponents(x, vt, base, i, out):
    """out_j = base_j - ½|x_i - v_j|²."""
    d, m = vt.shape
    if d == 1:
        for j in range(m):
            first = x[i, 0] - vt[0, j]
            out[j] = base[j] - 0.5 * first * first
        return
    for j in range(m):
        first = x[i, 0] - vt[0, j]
        second = x[i, 1] - vt[1, j]
        out[j] = base[j] - 0.5 * (first * first + second * second)
    k = 2
    while k + 3 < d:
        for j in range(m):
            e0 = x[i, k] - vt[k, j]
            e1 = x[i, k + 1] - vt[k + 1, j]
            e2 = x[i, k + 2] - vt[k + 2, j]
            e3 = x[i, k + 3] - vt[k + 3, j]
            out[j] -= 0.5 * ((e0 * e0 + e1 * e1) + (e2 * e2 + e3 * e3))
        k += 4
    while k < d:
        for j in range(m):
            rest = x[i, k] - vt[k, j]
            out[j] -= 0.5 * rest * rest
        k += 1


@compiled
def log_sum_of(values):
    """log Σ exp(values), -inf when all are -inf."""
    top = -np.inf
    for j in range(values.size):
        top = max(top, values[j])
    if top == -np.inf:
        return top
    total = 0.0
    for j in range(values.size):
        total += exponential(values[j] - top)
    return top + math.log(total)


@compiled
def log_sum_rows(x, vt, log_weights, start, stop, buffer, out):
    """out_i = log Σ_j exp(log_weights_j - ½|x_i - v_j|²)."""
    for i in range(start, stop):
        exponents(x, vt, log_weights, i, buffer)
        out[i] = log_sum_of(buffer)


@compiled
def log_sum_and_mean(x, vt, log_weights, start, stop, buffer, out, mean):
    """As log_sum_rows, and mean_i = the average of v_j under those weights."""
    d, m = vt.shape
    for i in range(start, stop):
        exponents(x, vt, log_weights, i, buffer)
        out[i] = log_sum_of(buffer)
        for j in range(m):
            buffer[j] = exponential(buffer[j] - out[i])
        for k in range(d):
            total = 0.0
            for j in range(m):
                total += buffer[j] * vt[k, j]
            mean[i, k] = total


@compiled
def sweep_rows(x, vt, q, log_f, log_a, relaxation, start, stop, buffer, new_f, excess, columns):
    """Row sums of exp(log_f_i + q_j - ½|x_i - v_j|²), the update of f, and the column sums after it.

    `columns` gathers exp(log a_i + new_f_i + q_j - ½|x_i - v_j|²). Row sums are near 1 once the solver runs, so the
    first attempt needs no maximum; a row that over- or underflows is done again with one.
    """
    d, m = vt.shape
    half = 0.5
    for i in range(start, stop):
        offset = log_f[i]
        total = 0.0
        if d == 2:
            x0 = x[i, 0]
            x1 = x[i, 1]
            for j in range(m):
                first = x0 - vt[0, j]
                second = x1 - vt[1, j]
                value = exponential(offset + q[j] - half * (first * first + second * second))
                buffer[j] = value
                total += value
        else:
            exponents(x, vt, q, i, buffer)
            for j in range(m):
                value = exponential(offset + buffer[j])
                buffer[j] = value
                total += value
        shift = 0.0
        if not (total > 1e-200 and total < 1e200):
            exponents(x, vt, q, i, buffer)
            row = log_sum_of(buffer)
            shift = offset + row
            for j in range(m):
                buffer[j] = exponential(buffer[j] - row)
            total = 1.0
        excess[i] = shift + math.log(total)
        new_f[i] = offset - relaxation * excess[i]
        factor = math.exp(min(log_a[i] + new_f[i] - offset + shift, 700.0))
        for j in range(m):
            columns[j] += factor * buffer[j]


@compiled
def sweep_matrix(log_kernel, q, log_f, log_a, relaxation, start, stop, buffer, new_f, excess, columns):
    """As sweep_rows, from a stored matrix of log k_ij, which may hold -inf."""
    m = q.size
    for i in range(start, stop):
        offset = log_f[i]
        total = 0.0
        for j in range(m):
            value = exponential(offset + q[j] + log_kernel[i, j])
            buffer[j] = value
            total += value
        shift = 0.0
        if not (total > 1e-200 and total < 1e200):
            for j in range(m):
                buffer[j] = q[j] + log_kernel[i, j]
            row = log_sum_of(buffer)
            if row == -np.inf:
                excess[i] = -np.inf
                new_f[i] = offset
                continue
            shift = offset + row
            for j in range(m):
                buffer[j] = exponential(buffer[j] - row)
            total = 1.0
        excess[i] = shift + math.log(total)
        new_f[i] = offset - relaxation * excess[i]
        factor = math.exp(min(log_a[i] + new_f[i] - offset + shift, 700.0))
        for j in range(m):
            columns[j] += factor * buffer[j]


@compiled
def nearest_cost(x, vt, start, stop, buffer, zeros, out):
    """out_i = min_j ½|x_i - v_j|²."""
    for i in range(start, stop):
        exponents(x, vt, zeros, i, buffer)
        top = -np.inf
        for j in range(buffer.size):
            top = max(top, buffer[j])
        out[i] = -top


@compiled
def count_entries(x, vt, p, q, log_cutoff, start, stop, buffer, counts):
    """counts_i = how many j have p_i + q_j - ½|x_i - v_j|² above log_cutoff."""
    for i in range(start, stop):
        exponents(x, vt, q, i, buffer)
        limit = log_cutoff - p[i]
        found = 0
        for j in range(buffer.size):
            if buffer[j] > limit:
                found += 1
        counts[i] = found


@compiled
def fill_entries(x, vt, p, q, log_cutoff, start, stop, buffer, row_starts, columns, values):
    """Write the entries counted by count_entries in row order."""
    for i in range(start, stop):
        exponents(x, vt, q, i, buffer)
        limit = log_cutoff - p[i]
        place = row_starts[i]
        for j in range(buffer.size):
            if buffer[j] > limit:
                columns[place] = j
                values[place] = exponential(p[i] + buffer[j])
                place += 1


@compiled
def sample_targets(x, vt, log_weights, uniforms, row_starts, start, stop, buffer, out):
    """For row i, invert the cumulative sum of its weights at uniforms[row_starts[i]:row_starts[i + 1]]."""
    for i in range(start, stop):
        exponents(x, vt, log_weights, i, buffer)
        top = log_sum_of(buffer)
        total = 0.0
        for j in range(buffer.size):
            total += exponential(buffer[j] - top)
            buffer[j] = total
        for k in range(row_starts[i], row_starts[i + 1]):
            wanted = uniforms[k] * total
            low = 0
            high = buffer.size - 1
            while low < high:  # first index whose cumulative sum exceeds the wanted value
                middle = (low + high) // 2
                if buffer[middle] > wanted:
                    high = middle
                else:
                    low = middle + 1
            out[k] = low


@compiled
def top_entries(x, vt, log_weights, start, stop, buffer, targets, values):
    """The largest entries of each row's softmax, sorted from the largest; values are probabilities given the row."""
    wanted = targets.shape[1]
    for i in range(start, stop):
        exponents(x, vt, log_weights, i, buffer)
        total = log_sum_of(buffer)
        for r in range(wanted):
            targets[i, r] = -1
            values[i, r] = -np.inf
        for j in range(buffer.size):
            if buffer[j] > values[i, wanted - 1]:
                r = wanted - 1
                while r > 0 and buffer[j] > values[i, r - 1]:
                    values[i, r] = values[i, r - 1]
                    targets[i, r] = targets[i, r - 1]
                    r -= 1
                values[i, r] = buffer[j]
                targets[i, r] = j
        for r in range(wanted):
            values[i, r] = math.exp(values[i, r] - total)
