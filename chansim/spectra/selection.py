"""Choosing a few wavenumbers and non-negative weights that stand for many.

Greedy choice by orthogonal least squares with non-negative weights, then
exchanges, after the published methods of weighted representative frequencies
(Buehler et al. 2010, JQSRT 111, 602) and optimal spectral sampling (Moncet et
al. 2008, J. Atmos. Sci. 65, 3917).
"""

import numpy as np
from scipy.optimize import nnls

_RANK_LIMIT = 1e-14  # of the largest eigenvalue of the normal matrix
_TRIED = 16  # most promising candidates that are solved with non-negative weights


def condensed(candidates, targets):
    """Fewer rows with the same least-squares problems and root-mean-square errors.

    The rows of the result are the leading principal directions of all columns;
    what is dropped is below 1e-7 of the largest.
    """
    both = np.concatenate([candidates, targets], axis=1)
    values, vectors = np.linalg.eigh(both.T @ both)
    kept = values > _RANK_LIMIT * values[-1]
    factor = np.sqrt(values[kept])[:, None] * vectors[:, kept].T * np.sqrt(kept.sum() / candidates.shape[0])
    return np.ascontiguousarray(factor[:, : candidates.shape[1]]), factor[:, candidates.shape[1] :]


def choose_nodes(candidates, targets, tolerance, most, rounds=0, least=1):
    """Pick columns whose non-negative combinations reproduce the targets.

    Parameters
    ----------
    candidates : (scenes, n), in units in which an error of 1 matters equally in every scene
    targets : (scenes, k), in the same units
    tolerance : stop when the root-mean-square error of every target is below this
    most : largest number of columns
    least : go on to this number of columns even below the tolerance
    rounds : of exchanges after each addition (see `exchange_nodes`); better and slower

    Returns
    -------
    chosen : (m,) column indices
    weights : (m, k), >= 0
    error : (k,) root-mean-square error of each target
    """
    chosen = np.zeros(0, dtype=int)
    weights = np.zeros((0, targets.shape[1]))
    error = np.sqrt(np.mean(targets**2, axis=0))
    while chosen.size < most and (chosen.size < least or np.any(error > tolerance)):
        new = _best_addition(candidates, targets, list(chosen))
        if new is None:
            break
        grown = exchange_nodes(candidates, targets, [*chosen, new], rounds)
        if grown[0].size <= chosen.size:  # an exchange that loses a node can lead in circles
            grown = exchange_nodes(candidates, targets, [*chosen, new], 0)
        if np.sum(grown[2] ** 2) > 0.9999 * np.sum(error**2):
            break
        chosen, weights, error = grown
    return chosen, weights, error


def exchange_nodes(candidates, targets, chosen, rounds, least_gain=0.02):
    """Improve a choice: each node in turn gives way to another column if that does better. Same returns.

    It ends after `rounds`, or when a round lowers the squared error by less than `least_gain` of it.
    """
    chosen = [int(c) for c in chosen]
    weights, error = _solve(candidates[:, chosen], targets)
    for _ in range(rounds):
        before = np.sum(error**2)
        for position in range(len(chosen)):
            rest = chosen[:position] + chosen[position + 1 :]
            new = _best_addition(candidates, targets, rest)
            if new is None or new == chosen[position]:
                continue
            trial = rest[:position] + [new] + rest[position:]
            trial_weights, trial_error = _solve(candidates[:, trial], targets)
            if np.sum(trial_error**2) < np.sum(error**2):
                chosen, weights, error = trial, trial_weights, trial_error
        if np.sum(error**2) > (1.0 - least_gain) * before:
            break
    used = weights.sum(axis=1) > 0
    return np.asarray(chosen)[used], weights[used], error


def _best_addition(candidates, targets, chosen):
    """The column that lowers the error most when it joins the chosen ones; None if none does."""
    whole = np.sum(candidates**2, axis=0)
    if chosen:
        basis = np.linalg.qr(candidates[:, chosen])[0]
        inside = basis.T @ candidates
        free = whole - np.sum(inside**2, axis=0)
        residual = targets - basis @ (basis.T @ targets)
    else:
        free, residual = whole, targets
    possible = free > 1e-10 * whole
    possible[chosen] = False
    # only columns that would enter with a positive weight
    score = np.sum(np.maximum(residual.T @ candidates, 0.0) ** 2, axis=0) / np.where(possible, free, np.inf)
    best, lowest = None, np.inf
    for new in np.argsort(score)[::-1][:_TRIED]:
        if not possible[new]:
            continue
        _, error = _solve(candidates[:, [*chosen, int(new)]], targets)
        if np.sum(error**2) < lowest:
            best, lowest = int(new), np.sum(error**2)
    return best


def _solve(matrix, targets):
    """Non-negative least squares for each target: weights (m, k), root-mean-square errors (k,)."""
    q, r = np.linalg.qr(matrix)
    projected = q.T @ targets
    outside = np.sum(targets**2, axis=0) - np.sum(projected**2, axis=0)
    weights, error = np.empty((matrix.shape[1], targets.shape[1])), np.empty(targets.shape[1])
    for k in range(targets.shape[1]):
        weights[:, k], rest = nnls(r, projected[:, k], maxiter=100 * r.shape[1])
        error[k] = np.sqrt((rest**2 + max(outside[k], 0.0)) / targets.shape[0])
    return weights, error
