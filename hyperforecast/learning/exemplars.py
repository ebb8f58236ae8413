"""Exemplars: the rows of old classes that a device keeps.

They are stored *rank-major*: the first exemplar of every class, then the second of
every class, and so on. Cutting every class to its first m exemplars, the only way in
which old classes shrink, is then a prefix of the stored rows.
"""

from dataclasses import dataclass

import numpy as np


@dataclass(frozen=True)
class Exemplars:
    """Rows kept of old classes, rank-major.

    Attributes
    ----------
    Z : ndarray of shape (m, d), float32
        Standardized features.
    y : ndarray of shape (m,), int64
        Class codes.
    rank : ndarray of shape (m,), int64
        Place of the row in its class's order, from 0; never decreases along the rows.
    """

    Z: np.ndarray
    y: np.ndarray
    rank: np.ndarray

    @classmethod
    def none(cls, n_features):
        """Return an empty memory."""
        return cls(np.empty((0, n_features), np.float32), np.empty(0, np.int64), np.empty(0, np.int64))

    def __len__(self):
        return len(self.y)

    def cut(self, per_class):
        """Return the memory with at most the first `per_class` exemplars of every class."""
        end = np.searchsorted(self.rank, per_class)
        return Exemplars(self.Z[:end], self.y[:end], self.rank[:end])

    def without(self, codes):
        """Return the memory without the classes in `codes`."""
        keep = ~np.isin(self.y, codes)
        return Exemplars(self.Z[keep], self.y[keep], self.rank[keep])

    def joined(self, other):
        """Return the memory with the exemplars of `other`; where classes meet, its ranks go on from those here."""
        rank = np.concatenate([self.rank, other.rank])
        order = np.argsort(rank, kind="stable")
        Z, y = np.concatenate([self.Z, other.Z]), np.concatenate([self.y, other.y])
        return Exemplars(Z[order], y[order], rank[order])


def herd(features, count):
    """Return the first `count` rows in herding order for each of K sets side by side.

    Each pick brings the mean of the picked rows as near as possible to the mean of all
    rows, so that every prefix is a good smaller set.

    Parameters
    ----------
    features : ndarray of shape (K, n, h)
    count : int
        Rows to pick, at most n.

    Returns
    -------
    ndarray of shape (K, count), int64

    Notes
    -----
    Algorithm 4 of Rebuffi et al. 2017, "iCaRL", without repeats. In ||mu - (S + phi)/k||^2 only
    ||phi||^2 + 2 phi.(S - k mu) depends on the candidate phi.
    """
    n_sets, n_rows, _ = features.shape
    mean = features.mean(axis=1)
    squares = np.einsum("knh,knh->kn", features, features)
    total = np.zeros_like(mean)
    picked = np.empty((n_sets, count), np.int64)
    sets = np.arange(n_sets)
    for k in range(1, count + 1):
        cost = squares + 2 * np.matmul(features, (total - k * mean)[:, :, None])[:, :, 0]
        best = cost.argmin(axis=1)
        picked[:, k - 1] = best
        squares[sets, best] = np.inf
        total += features[sets, best]
    return picked


def unit_rows(features):
    """Return features with every row scaled to length 1; rows of zeros stay."""
    length = np.sqrt(np.einsum("...h,...h->...", features, features))[..., None]
    return features / np.where(length > 0, length, 1)


def choose_exemplars(Z, y, features, count):
    """Return `Exemplars` of every class in `y`: its first `count` rows (fewer if it has fewer) in herding order.

    Parameters
    ----------
    Z : ndarray of shape (n, d)
        Standardized features, as they will be kept.
    y : ndarray of shape (n,), int
    features : ndarray of shape (n, h)
        What the herding looks at, of any length.
    count : int
    """
    chosen, ranks = [], []
    for code in np.unique(y):
        rows = np.flatnonzero(y == code)
        order = herd(unit_rows(features[rows])[None], min(count, len(rows)))[0]
        chosen.append(rows[order])
        ranks.append(np.arange(len(order)))
    chosen, ranks = np.concatenate(chosen), np.concatenate(ranks)
    order = np.argsort(ranks, kind="stable")
    return Exemplars(Z[chosen[order]], y[chosen[order]], ranks[order])
