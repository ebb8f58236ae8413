"""Do invented streams surround measured ones? Boundaries of a records file in the space of descriptors."""

from dataclasses import dataclass

import numpy as np

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.forecasting import Familiarity
from hyperforecast.forecasting.familiarity import FAMILIAR_SHARE
from hyperforecast.workshop.streams import FAMILIES

# Between these quantiles of the synthetic boundaries a descriptor is within their range.
RANGE = (0.01, 0.99)
# A head that has diverged has descriptors of any size: without a limit, few such boundaries make up the components.
FARTHEST = 10.0


@dataclass(frozen=True)
class DescriptorSpace:
    """Boundaries of synthetic and of open sources, and how far the ones surround the others.

    Attributes
    ----------
    sources : ndarray of shape (B,), text
    synthetic : ndarray of shape (B,), bool
    plane : ndarray of shape (B, 2)
        Places on the two leading principal components.
    explained : ndarray of shape (2,)
        Share of the variance that each component holds.
    names : list of F str
        The descriptors that synthetic and open boundaries know.
    described : ndarray of shape (B, F)
    ranges : ndarray of shape (F, 2)
        `RANGE` of each over the synthetic boundaries.
    within : ndarray of shape (F,)
        Share of the open boundaries that lie within the synthetic ones' range, of those that know the descriptor.
    unfamiliar : dict of str to (int, int)
        Of each open source, how many boundaries lie too far out for a `Familiarity` that knows the synthetic ones alone
        (other signs aside), and how many there are.
    """

    sources: np.ndarray
    synthetic: np.ndarray
    plane: np.ndarray
    explained: np.ndarray
    names: list
    described: np.ndarray
    ranges: np.ndarray
    within: np.ndarray
    unfamiliar: dict

    @property
    def flagged(self):
        """Share of the open boundaries that are flagged unfamiliar."""
        return sum(n for n, _ in self.unfamiliar.values()) / sum(n for _, n in self.unfamiliar.values())

    def as_dict(self):
        """Return the figures as a JSON-able dict."""
        return {
            "boundaries": {"synthetic": int(self.synthetic.sum()), "open": int((~self.synthetic).sum())},
            "explained": [round(float(share), 4) for share in self.explained],
            "flagged": round(self.flagged, 4), "median_within": round(float(np.median(self.within)), 4),
            "flagged_by_source": {source: list(counts) for source, counts in self.unfamiliar.items()},
            "within": {name: round(float(share), 4) for name, share in zip(self.names, self.within)},
        }


def descriptor_space(described, sources):
    """Return the `DescriptorSpace` of boundaries; None without open ones, or with synthetic ones of a single family.

    Parameters
    ----------
    described : array-like of shape (B, F)
        Descriptors in the order of `hyperforecast.describing.DESCRIPTORS`, NaN where missing.
    sources : sequence of B str

    Notes
    -----
    Components are those of descriptors standardized as for familiarity: spreads from the synthetic median, through
    arcsinh, which is a logarithm far out, and cut at `FARTHEST` spreads; a missing one counts as the median.
    """
    described, sources, names = np.asarray(described, np.float64), np.asarray(sources), np.array(list(DESCRIPTORS))
    synthetic = np.isin(sources, list(FAMILIES))
    if synthetic.all() or len(np.unique(sources[synthetic])) < 2:
        return None
    known = np.isfinite(described[synthetic]).any(axis=0) & np.isfinite(described[~synthetic]).any(axis=0)
    described, names = described[:, known], names[known]
    familiarity = Familiarity.fit(described[synthetic], names, sources[synthetic], seed=0)
    spreads = np.clip((described - familiarity.centre) / familiarity.scale, -FARTHEST, FARTHEST)
    spreads = np.nan_to_num(np.arcsinh(spreads))
    spreads -= spreads.mean(axis=0)
    places, strength, _ = np.linalg.svd(spreads, full_matrices=False)
    ranges = np.nanquantile(described[synthetic], RANGE, axis=0).T
    values = described[~synthetic]
    inside = (values >= ranges[:, 0]) & (values <= ranges[:, 1])
    scores = np.array([familiarity.assess(dict(zip(names.tolist(), vector))).score for vector in values])
    flags = scores < FAMILIAR_SHARE
    return DescriptorSpace(
        sources=sources, synthetic=synthetic, plane=places[:, :2] * strength[:2],
        explained=strength[:2] ** 2 / (strength**2).sum(), names=names.tolist(), described=described,
        ranges=ranges, within=inside.sum(axis=0) / np.isfinite(values).sum(axis=0),
        unfamiliar={str(source): (int(flags[sources[~synthetic] == source].sum()), int((sources == source).sum()))
                    for source in np.unique(sources[~synthetic])})
