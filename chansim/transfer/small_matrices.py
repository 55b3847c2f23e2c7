"""Linear algebra of a few rows for compiled code: no allocation, no library call."""

import math

from numba import njit


@njit(cache=True)
def cholesky(a, n, lower):
    """Lower triangle L with L L^T = a (symmetric, positive definite)."""
    for i in range(n):
        for j in range(n):
            lower[i, j] = 0.0
    for j in range(n):
        total = a[j, j]
        for k in range(j):
            total -= lower[j, k] * lower[j, k]
        lower[j, j] = math.sqrt(max(total, 1e-300))
        for i in range(j + 1, n):
            total = a[i, j]
            for k in range(j):
                total -= lower[i, k] * lower[j, k]
            lower[i, j] = total / lower[j, j]


@njit(cache=True)
def symmetric_eigen(a, n, vectors):
    """Eigenvalues on the diagonal of a (destroyed), eigenvectors in the columns of vectors (cyclic Jacobi)."""
    for i in range(n):
        for j in range(n):
            vectors[i, j] = 1.0 if i == j else 0.0
    for _ in range(30):
        off, size = 0.0, 0.0
        for i in range(n):
            size += a[i, i] * a[i, i]
            for j in range(i):
                off += a[i, j] * a[i, j]
        if off <= 1e-26 * size:
            return
        for p in range(n - 1):
            for q in range(p + 1, n):
                if a[p, q] == 0.0:
                    continue
                theta = 0.5 * (a[q, q] - a[p, p]) / a[p, q]
                t = math.copysign(1.0, theta) / (abs(theta) + math.sqrt(theta * theta + 1.0))
                c = 1.0 / math.sqrt(t * t + 1.0)
                s = t * c
                for k in range(n):
                    x, y = a[k, p], a[k, q]
                    a[k, p], a[k, q] = c * x - s * y, s * x + c * y
                for k in range(n):
                    x, y = a[p, k], a[q, k]
                    a[p, k], a[q, k] = c * x - s * y, s * x + c * y
                for k in range(n):
                    x, y = vectors[k, p], vectors[k, q]
                    vectors[k, p], vectors[k, q] = c * x - s * y, s * x + c * y


@njit(cache=True)
def inverse(a, n, out):
    """Inverse of a (destroyed) by elimination with row exchanges."""
    for i in range(n):
        for j in range(n):
            out[i, j] = 1.0 if i == j else 0.0
    for j in range(n):
        best = j
        for i in range(j + 1, n):
            if abs(a[i, j]) > abs(a[best, j]):
                best = i
        if best != j:
            for k in range(n):
                a[j, k], a[best, k] = a[best, k], a[j, k]
                out[j, k], out[best, k] = out[best, k], out[j, k]
        pivot = 1.0 / a[j, j]
        for k in range(n):
            a[j, k] *= pivot
            out[j, k] *= pivot
        for i in range(n):
            if i != j and a[i, j] != 0.0:
                factor = a[i, j]
                for k in range(n):
                    a[i, k] -= factor * a[j, k]
                    out[i, k] -= factor * out[j, k]


@njit(cache=True)
def lower_inverse_transposed(lower, n, out):
    """Inverse transpose of a lower triangle."""
    for i in range(n):
        for j in range(n):
            out[i, j] = 0.0
    for j in range(n):  # column j of the inverse is row j of its transpose
        out[j, j] = 1.0 / lower[j, j]
        for i in range(j + 1, n):
            total = 0.0
            for k in range(j, i):
                total += lower[i, k] * out[j, k]
            out[j, i] = -total / lower[i, i]
