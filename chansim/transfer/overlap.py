"""Cloud overlap by deterministic subcolumns.

The generator of Raisanen et al. 2004 (Q. J. R. Meteorol. Soc. 130, 2047) with
stratified, repeatable ranks instead of random numbers: the result depends on
the column alone, not on threads or chunks.
"""

import math

from numba import njit

# the names that users give
OVERLAPS = {"maximum-random": 0, "maximum": 1, "random": 2, "exponential-random": 3}
_GOLDEN = 0.6180339887498949  # steps of a low-discrepancy sequence
_SILVER = 0.4142135623730951


@njit(cache=True)
def _rank(subcolumn, count, cell, step):
    """Stratified rank in (0, 1): a rotated, cell-dependent permutation of the subcolumns."""
    multiplier = 1 + 2 * (cell * 7919 % count)
    while _common_divisor(multiplier, count) != 1:
        multiplier += 1
    shift = int(math.floor(count * ((cell + 1) * step % 1.0)))
    return ((multiplier * subcolumn + shift) % count + 0.5) / count


@njit(cache=True)
def _common_divisor(a, b):
    while b:
        a, b = b, a % b
    return a


@njit(cache=True)
def fill_subcolumn(fraction, height, overlap, decorrelation_length, subcolumn, count, cloudy):
    """Which cells are cloudy in one subcolumn.

    Parameters
    ----------
    fraction : (cells,) cloud fraction, top -> surface [1]
    height : (cells,) [m], used by the exponential-random overlap only
    overlap : a value of `OVERLAPS`
    decorrelation_length : [m]
    subcolumn, count : index and number of subcolumns
    cloudy : (cells,) bool, result
    """
    rank = (subcolumn + 0.5) / count
    for k in range(fraction.size):
        fresh = _rank(subcolumn, count, k, _GOLDEN)
        if k > 0:
            if overlap == 0:
                above = fraction[k - 1]
                if rank <= 1.0 - above:
                    rank = fresh * (1.0 - above)
            elif overlap == 2:
                rank = fresh
            elif overlap == 3:
                keep = math.exp(-abs(height[k - 1] - height[k]) / decorrelation_length)
                if fraction[k] <= 0.0 or fraction[k - 1] <= 0.0:
                    keep = 0.0
                if _rank(subcolumn, count, k, _SILVER) > keep:
                    rank = fresh
        cloudy[k] = rank > 1.0 - fraction[k]
