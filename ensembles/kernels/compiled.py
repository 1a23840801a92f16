"""The compiled loops over pairs of points: log-sums, entries, draws.

Layout: x and vt as in compiled_tiles.py, and log-weights as its base. Rows come in chunks `bounds` (c, 2); the columns that
take part in chunk c are ``ranges[pointers[c]:pointers[c + 1]]``, all of them or those near its rows. A row's numbers are packed
range after range into a buffer that stays in cache. Every function works on the chunks first..last and writes only to places
that belong to their rows.
"""

from __future__ import annotations

import math

import numpy as np

from .compiled_tiles import exponents
from .fast_exp import compiled, exponential, larger, wide_vectors

__all__ = [
    "count_entries",
    "fill_entries",
    "log_sum_and_mean",
    "expectation_rows",
    "log_sum_of",
    "log_sum_rows",
    "nearest_cost",
    "sample_targets",
    "top_entries",
]


@compiled
def largest(values):
    """max values, -inf if there are none."""
    wide_vectors()
    top = -np.inf
    for j in range(values.size):
        top = larger(top, values[j])
    return top


@compiled
def log_sum_of(values):
    """log Σ exp(values), -inf when all are -inf."""
    wide_vectors()
    top = largest(values)
    if top == -np.inf:
        return top
    total = 0.0
    for j in range(values.size):
        total += exponential(values[j] - top)
    return top + math.log(total)


@compiled
def log_sum_rows(x, vt, log_weights, bounds, pointers, ranges, first, last, buffer, out):
    """out_i = log Σ_j exp(log_weights_j - ½|x_i - v_j|²)."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, buffer)
            out[i] = log_sum_of(buffer[:count])


@compiled
def log_sum_and_mean(x, vt, log_weights, bounds, pointers, ranges, first, last, buffer, out, mean):
    """As log_sum_rows, and mean_i = the average of v_j under those weights."""
    d = vt.shape[0]
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, buffer)
            row = buffer[:count]
            out[i] = log_sum_of(row)
            for j in range(row.size):
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
            count = exponents(x, vt, log_weights, near, i, buffer)
            row = buffer[:count]
            top = largest(row)
            sum_row = 0.0
            for j in range(row.size):
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
            count = exponents(x, vt, zeros, near, i, buffer)
            out[i] = -largest(buffer[:count])


@compiled
def count_entries(x, vt, q, p, log_cutoff, bounds, pointers, ranges, first, last, buffer, counts):
    """counts_i = how many j have p_i + q_j - ½|x_i - v_j|² above log_cutoff."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, q, near, i, buffer)
            limit = log_cutoff - p[i]
            found = 0
            for j in range(count):
                if buffer[j] > limit:
                    found += 1
            counts[i] = found


@compiled
def fill_entries(x, vt, q, p, log_cutoff, bounds, pointers, ranges, first, last, buffer, row_starts, columns, values):
    """Write the entries counted by count_entries in row order."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            exponents(x, vt, q, near, i, buffer)
            limit = log_cutoff - p[i]
            place = row_starts[i]
            packed = 0
            for part in range(near.shape[0]):
                for j in range(near[part, 0], near[part, 1]):
                    if buffer[packed] > limit:
                        columns[place] = j
                        values[place] = exponential(p[i] + buffer[packed])
                        place += 1
                    packed += 1


@compiled
def sample_targets(x, vt, log_weights, uniforms, row_starts, bounds, pointers, ranges, first, last, buffer, out):
    """For row i, invert the cumulative sum of its weights at uniforms[row_starts[i]:row_starts[i + 1]]."""
    for chunk in range(first, last):
        near = ranges[pointers[chunk] : pointers[chunk + 1]]
        for i in range(bounds[chunk, 0], bounds[chunk, 1]):
            count = exponents(x, vt, log_weights, near, i, buffer)
            row = buffer[:count]
            top = log_sum_of(row)
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
            count = exponents(x, vt, log_weights, near, i, buffer)
            total = log_sum_of(buffer[:count])
            for r in range(wanted):
                targets[i, r] = -1
                values[i, r] = -np.inf
            packed = 0
            for part in range(near.shape[0]):
                for j in range(near[part, 0], near[part, 1]):
                    value = buffer[packed]
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
