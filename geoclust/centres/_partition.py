"""Compiled loops over sampled memberships."""

from __future__ import annotations

import numpy as np
from numba import njit


@njit(nogil=True, cache=True)
def refine(indptr, indices, together, labels, sizes, sweeps):
    """Move single points between clusters while that lowers the expected Binder loss.

    `together` holds, for each stored pair, the probability of a common centre.
    A point gains sum(2 p - 1) over the members of a cluster by joining it; a
    member with which it was never seen counts -1.
    """
    n = labels.size
    room = sizes.size
    gain = np.zeros(room)
    for _ in range(sweeps):
        changed = False
        for i in range(n):
            home = labels[i]
            touched = np.empty(indptr[i + 1] - indptr[i] + 1, np.int64)
            count = 0
            for q in range(indptr[i], indptr[i + 1]):
                j = indices[q]
                if j == i:
                    continue
                c = labels[j]
                if gain[c] == 0.0:
                    touched[count] = c
                    count += 1
                gain[c] += 2.0 * together[q]
            best, best_gain = -1, 0.0
            for t in range(count):
                c = touched[t]
                others = sizes[c] - (1 if c == home else 0)
                value = gain[c] - others
                if value > best_gain + 1e-12:
                    best, best_gain = c, value
            for t in range(count):
                gain[touched[t]] = 0.0
            stay = best == home or (best == -1 and sizes[home] == 1)
            if not stay:
                if best == -1:
                    # alone is best: an empty cluster
                    for c in range(room):
                        if sizes[c] == 0:
                            best = c
                            break
                sizes[home] -= 1
                sizes[best] += 1
                labels[i] = best
                changed = True
        if not changed:
            break


@njit(nogil=True, cache=True)
def leading_centres(owner, members, start, x, y, offset):
    """For each cluster and draw, the position of the centre that most of its members belong to.

    `owner` is (draws, n); `members[start[k]:start[k + 1]]` are the points of
    cluster k; the centres of draw m are rows offset[m]... of x and y.
    """
    draws = owner.shape[0]
    clusters = start.size - 1
    out = np.full((clusters, draws, 2), np.nan)
    for k in range(clusters):
        for m in range(draws):
            best, best_count = -1, 0
            for a in range(start[k], start[k + 1]):
                c = owner[m, members[a]]
                if c < 0 or c == best:
                    continue
                count = 0
                for b in range(start[k], start[k + 1]):
                    if owner[m, members[b]] == c:
                        count += 1
                if count > best_count:
                    best, best_count = c, count
            if best >= 0:
                out[k, m, 0] = x[offset[m] + best]
                out[k, m, 1] = y[offset[m] + best]
    return out
