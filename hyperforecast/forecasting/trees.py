"""Gradient-boosted trees fitted by LightGBM, evaluated with numpy alone.

All trees of an ensemble are one sequence of nodes in preorder: a split, its left subtree, its
right subtree; then the next tree. The sequence alone says how the nodes hang together, so a
stored ensemble has no child pointers that could be wrong.

Letters: N nodes of all trees, S distinct splits, L leaves, T trees, F features, n rows.
"""

from functools import cached_property

import numpy as np

from hyperforecast.checks import InputError
from hyperforecast.storage import stored_array

MISSING_TYPES = ("None", "Zero", "NaN")
TINY = float(np.float32(1e-35))  # LightGBM takes smaller numbers for zero
LARGEST = 1e300  # stands for infinity in a dump: a split that parts numbers from NaN
ROWS_AT_ONCE = 512


class TreeEnsemble:
    """A sum of decision trees over numeric features.

    A row goes left at a split if its feature is at most the threshold. A missing value (a zero
    or NaN, as the split's missing type says) takes the split's default side instead; NaN counts
    as 0 where it is not the missing value.

    Parameters
    ----------
    n_features : int
        F.
    feature, threshold, missing, default_left : ndarray of shape (S,)
        The distinct splits: feature index; float64 threshold; index into `MISSING_TYPES`; whether a
        missing value goes left.
    split : ndarray of shape (N,)
        The nodes of all trees in preorder: index of the node's split, -1 for a leaf.
    leaf_value : ndarray of shape (L,), float64
        Values of the leaves in the same order.
    """

    def __init__(self, n_features, feature, threshold, missing, default_left, split, leaf_value):
        # As small as they came: a device that only restricts the ensemble never needs them larger.
        self.n_features, self.feature, self.missing = int(n_features), _whole(feature), _whole(missing)
        self.threshold = threshold.astype(np.float64, copy=False)
        self.default_left = default_left.astype(bool, copy=False)
        self.split = _whole(split)
        self.leaf_value = leaf_value.astype(np.float64, copy=False)

    @property
    def n_trees(self):
        """Number of trees T."""
        return len(self._roots)

    @classmethod
    def from_dump(cls, dump):
        """Return the ensemble in the dict of LightGBM's `Booster.dump_model()`.

        Raises
        ------
        InputError
            For several outputs, averaged outputs (random forests), categorical splits or linear trees.
        """
        if not dump["tree_info"] or dump["num_tree_per_iteration"] != 1 or dump["average_output"]:
            raise InputError("trees", "must be summed up to one output",
                             f"{len(dump['tree_info'])} trees, {dump['num_tree_per_iteration']} an iteration, "
                             f"averaged: {dump['average_output']}", "fit one boosted model per output")
        nodes, leaf_value = [], []
        for tree in dump["tree_info"]:
            waiting = [tree["tree_structure"]]
            while waiting:
                node = waiting.pop()
                if "leaf_value" in node:
                    if node.get("leaf_coeff"):
                        raise InputError("trees", "must have constant leaves", "linear trees",
                                         "fit without linear_tree")
                    nodes.append(None)
                    leaf_value.append(node["leaf_value"])
                else:
                    if node["decision_type"] != "<=":
                        raise InputError("trees", "must split by '<=' only", repr(node["decision_type"]),
                                         "fit without categorical features")
                    nodes.append((node["split_feature"], node["threshold"],
                                  MISSING_TYPES.index(node["missing_type"]), node["default_left"]))
                    waiting += [node["right_child"], node["left_child"]]
        distinct = sorted(set(nodes) - {None})
        number = {None: -1, **{split: i for i, split in enumerate(distinct)}}
        columns = [np.array(column) for column in zip(*distinct)] or [np.empty(0)] * 4
        return cls(dump["max_feature_idx"] + 1, *columns,
                   np.array([number[node] for node in nodes]), np.array(leaf_value, np.float64))

    def to_arrays(self, prefix):
        """Return the ensemble as a dict of compact arrays whose names begin with `prefix`."""
        return {
            f"{prefix}n_features": np.array([self.n_features], np.int32),
            f"{prefix}feature": self.feature.astype(np.min_scalar_type(self.n_features)),
            f"{prefix}threshold": self.threshold,
            f"{prefix}missing": self.missing.astype(np.uint8),
            f"{prefix}default_left": self.default_left,
            f"{prefix}split": self.split.astype(np.min_scalar_type(-max(1, len(self.threshold)))),
            f"{prefix}leaf_value": self.leaf_value,
        }

    @classmethod
    def from_arrays(cls, arrays, prefix):
        """Return the ensemble in arrays of `to_arrays`; `InputError` if they hold none."""
        def read(name, kinds, length=None):
            return stored_array(arrays, prefix + name, kinds=kinds, shape=(length,))

        def require(name, proper, rule):
            if not np.all(proper):
                raise InputError(prefix + name, rule, "other values")

        n_features = int(read("n_features", "i", 1)[0])
        threshold = read("threshold", "f")
        feature, missing, default_left = (read(name, kinds, len(threshold)) for name, kinds in
                                          [("feature", "u"), ("missing", "u"), ("default_left", "b")])
        split, leaf_value = read("split", "i"), read("leaf_value", "f")
        require("n_features", n_features >= 0, "must be at least 0")
        require("feature", feature < n_features, f"must be below {n_features}")
        require("threshold", np.isfinite(threshold), "must be finite")
        require("missing", missing < len(MISSING_TYPES), f"must be below {len(MISSING_TYPES)}")
        require("split", (split >= -1) & (split < len(threshold)), f"must be from -1 to {len(threshold) - 1}")
        open_ends = np.cumsum(np.where(split < 0, -1, 1))
        complete = len(split) and open_ends[-1] < 0 and (open_ends[:-1] > open_ends[-1]).all()
        require("split", complete, "must be complete trees in preorder")
        require("leaf_value", len(leaf_value) == (split < 0).sum(), "must be one for each leaf")
        require("leaf_value", np.isfinite(leaf_value), "must be finite")
        return cls(n_features, feature, threshold, missing, default_left, split, leaf_value)

    def predict(self, X):
        """Return the raw scores (n,) of rows X (n, F), exactly as LightGBM's `predict(raw_score=True)`."""
        X = np.asarray(X, np.float64)
        if X.ndim != 2 or X.shape[1] != self.n_features:
            raise InputError("X", f"must be rows of {self.n_features} features", f"shape {X.shape}")
        scores, value = np.zeros(len(X)), np.zeros(len(self.split))
        value[self.split < 0] = self.leaf_value
        for start in range(0, len(X), ROWS_AT_ONCE):
            rows = slice(start, start + ROWS_AT_ONCE)
            for leaves in self._walk(self._decide(X[rows])):
                scores[rows] += value[leaves]  # in LightGBM's order, for the same rounding
        return scores

    def restrict(self, vector, fixed):
        """Return a smaller ensemble in which some features have known values.

        Parameters
        ----------
        vector : array-like of shape (F,)
            Values of the fixed features, NaN allowed; the others are ignored.
        fixed : array-like of shape (F,), bool
            Which features are fixed.

        Returns
        -------
        TreeEnsemble
            Over the features that are not fixed, in the same order. Its predictions are exactly those of
            this ensemble for rows with `vector` in the fixed features.
        """
        vector, fixed = np.asarray(vector, np.float64), np.asarray(fixed)
        if vector.shape != (self.n_features,):
            raise InputError("vector", f"must have {self.n_features} values", f"shape {vector.shape}")
        if fixed.shape != (self.n_features,) or fixed.dtype != bool:
            raise InputError("fixed", f"must have {self.n_features} boolean values", f"{fixed.dtype}, {fixed.shape}")
        splits = np.flatnonzero(self.split >= 0)
        decided = splits[fixed[self.feature[self.split[splits]]]]
        goes_left = self._decide(vector[None])[self.split[decided], 0]
        # Each decided split drops itself and one of its subtrees: a run of nodes that follow each other.
        ends = self._ends
        right, after = ends[decided + 1], ends[decided]
        dropped = self._coverage(np.where(goes_left, right, decided + 1), np.where(goes_left, after, right)) > 0
        dropped[decided] = True
        split, leaf_value = self.split[~dropped], self.leaf_value[~dropped[self.split < 0]]
        used = np.zeros(len(self.threshold) + 1, bool)
        used[split] = True
        used[-1] = False  # where the leaves' -1 points
        split = np.where(split < 0, -1, (np.cumsum(used) - 1)[split])
        used = used[:-1]
        return TreeEnsemble((~fixed).sum(), (np.cumsum(~fixed) - 1)[self.feature[used]], self.threshold[used],
                            self.missing[used], self.default_left[used], split, leaf_value)

    @cached_property
    def _ends(self):
        """Where the subtree of each node ends, (N,): the place after its last node."""
        n_nodes = len(self.split)
        step = np.where(self.split < 0, -1, 1)
        level = np.cumsum(step)
        # A subtree that starts at level h ends where the level first reaches h - 1.
        place = np.arange(n_nodes)
        by_level = np.sort(level * n_nodes + place)
        ends = by_level[np.searchsorted(by_level, (level - step - 1) * n_nodes + place)] % n_nodes + 1
        return ends.astype(np.int32 if n_nodes < 2**31 else np.int64)

    @cached_property
    def _roots(self):
        """Root of each tree, (T,)."""
        lowest = np.minimum.accumulate(np.minimum(np.cumsum(np.where(self.split < 0, -1, 1)), 0))
        return np.concatenate([[0], np.flatnonzero(np.diff(lowest, prepend=0))[:-1] + 1])

    @cached_property
    def _connected(self):
        """What `_walk` needs: each node's right and left child (N, 2), and the height of each tree (T,)."""
        splits, place = np.flatnonzero(self.split >= 0), np.arange(len(self.split))
        child = np.stack([place, place], axis=1)  # a leaf leads to itself
        child[splits, 0] = self._ends[splits + 1]
        child[splits, 1] = splits + 1
        return child, np.maximum.reduceat(self._coverage(splits + 1, self._ends[splits]), self._roots)

    def _coverage(self, starts, stops):
        """Return, for each node, how many of the runs [start, stop) hold it."""
        changes = np.bincount(starts, minlength=len(self.split) + 1) - np.bincount(stops, minlength=len(self.split) + 1)
        return np.cumsum(changes[:-1])

    def _decide(self, X):
        """Return whether each of the S splits sends each of n rows left: (S, n) booleans."""
        X = X.T
        nan = np.isnan(X)
        X = np.where(nan | (np.abs(X) <= TINY), 0.0, np.clip(X, -LARGEST, LARGEST))
        is_missing = np.stack([np.zeros_like(nan), X == 0, nan])  # in the order of MISSING_TYPES
        goes_left = X[self.feature] <= self.threshold[:, None]
        return np.where(is_missing[self.missing, self.feature], self.default_left[:, None], goes_left)

    def _walk(self, goes_left):
        """Return the leaf (a node index) that each of n rows reaches in each tree: (T, n)."""
        n_rows = goes_left.shape[1]
        child, height = self._connected
        tallest_first = np.argsort(-height, kind="stable")
        taller = -height[tallest_first]
        nodes = np.repeat(self._roots[tallest_first][:, None], n_rows, axis=1)
        decisions, child, rows = goes_left.ravel(), child.ravel(), np.arange(n_rows)
        first_decision = np.maximum(self.split, 0).astype(np.intp) * n_rows
        for level in range(-taller[0]):
            active = nodes[:np.searchsorted(taller, -level)]  # trees with nodes below this level
            sides = decisions.take(first_decision.take(active) + rows)
            nodes[:len(active)] = child.take(2 * active + sides)
        leaves = np.empty_like(nodes)
        leaves[tallest_first] = nodes
        return leaves


def _whole(values):
    return values if values.dtype.kind in "iu" else values.astype(np.intp)
