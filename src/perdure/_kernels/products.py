"""Products of the transition matrix with vectors, straight from the counts: values are formed on the way.

pointer (n + 1,), column (n_entry,) with n for outside and n + 1 for blown up, count (n_entry, n_replicate),
inverse (n,): one over the bursts of the row. Vectors are (n, k) or (n + 2, k) where said.
"""

from __future__ import annotations

from perdure._kernels.folders import kernel

__all__ = ["left_product", "replicate_product", "right_product", "scatter_product", "total_counts"]


@kernel
def total_counts(count, out):  # type: ignore[no-untyped-def]
    """Counts summed over replicates: count (n_entry, n_replicate), fills out (n_entry,)."""
    for e in range(count.shape[0]):
        total = 0
        for r in range(count.shape[1]):
            total += count[e, r]
        out[e] = total


@kernel
def right_product(pointer, column, total, inverse, x, begin, end, y):  # type: ignore[no-untyped-def]
    """y[begin:end] = (P @ x)[begin:end]; x (n + 2, k), y (n, k); total (n_entry,)."""
    k = x.shape[1]
    for i in range(begin, end):
        for c in range(k):
            y[i, c] = 0.0
        for e in range(pointer[i], pointer[i + 1]):
            v = float(total[e])
            j = column[e]
            for c in range(k):
                y[i, c] += v * x[j, c]
        for c in range(k):
            y[i, c] *= inverse[i]


@kernel
def left_product(pointer, column, total, inverse, x, y):  # type: ignore[no-untyped-def]
    """y = x @ P; x (n, k), y (n + 2, k)."""
    k = x.shape[1]
    for j in range(y.shape[0]):
        for c in range(k):
            y[j, c] = 0.0
    for i in range(pointer.shape[0] - 1):
        busy = False
        for c in range(k):
            busy |= x[i, c] != 0.0
        if not busy:
            continue
        for e in range(pointer[i], pointer[i + 1]):
            v = total[e] * inverse[i]
            j = column[e]
            for c in range(k):
                y[j, c] += v * x[i, c]


@kernel
def replicate_product(pointer, column, count, x, begin, end, y):  # type: ignore[no-untyped-def]
    """y[i - begin, r] = sum of counts of replicate r times x over row i.

    x (n + 2, k), fills y (end - begin, n_replicate, k).
    """
    n_replicate, k = count.shape[1], x.shape[1]
    for i in range(begin, end):
        for r in range(n_replicate):
            for c in range(k):
                y[i - begin, r, c] = 0.0
        for e in range(pointer[i], pointer[i + 1]):
            j = column[e]
            for r in range(n_replicate):
                v = float(count[e, r])
                if v != 0.0:
                    for c in range(k):
                        y[i - begin, r, c] += v * x[j, c]


@kernel
def scatter_product(pointer, column, count, weight, begin, end, y):  # type: ignore[no-untyped-def]
    """y[column] += sum of count * weight over rows begin to end and replicates.

    weight (end - begin, n_replicate, k).
    """
    n_replicate, k = count.shape[1], weight.shape[2]
    for i in range(begin, end):
        for e in range(pointer[i], pointer[i + 1]):
            j = column[e]
            for r in range(n_replicate):
                v = float(count[e, r])
                if v != 0.0:
                    for c in range(k):
                        y[j, c] += v * weight[i - begin, r, c]
