"""Whether synthetic boundaries surround open ones: constructed clouds whose answer is known, and the page that tells."""

from dataclasses import replace

import numpy as np
import pytest
from sklearn.decomposition import PCA

from hyperforecast.describing import DESCRIPTORS
from hyperforecast.workshop.gathering import RecordsFile
from hyperforecast.workshop.reporting.descriptor_space import descriptor_space
from hyperforecast.workshop.reporting.records_report import records_page

F = len(DESCRIPTORS)
SYNTHETIC = ["synthetic_gaussian"] * 150 + ["synthetic_drifting"] * 150


def cloud(n, shift=0.0, seed=0):
    return np.random.default_rng(seed).standard_normal((n, F)) + shift


def test_open_boundaries_from_the_same_cloud_lie_within_and_are_familiar():
    space = descriptor_space(np.concatenate([cloud(300), cloud(100, seed=1)]), [*SYNTHETIC, *["olive"] * 60, *["vowel"] * 40])
    # By chance 98% lie between the 1% and the 99% quantile, and 5% of those from the same cloud are flagged.
    assert space.within.mean() == pytest.approx(0.98, abs=0.015) and space.flagged < 0.15
    assert {source: n for source, (_, n) in space.unfamiliar.items()} == {"olive": 60, "vowel": 40}
    assert space.synthetic.sum() == 300 and space.plane.shape == (400, 2)


def test_open_boundaries_from_elsewhere_lie_outside_and_are_flagged():
    described = np.concatenate([cloud(300), cloud(60, seed=1), cloud(40, shift=8.0, seed=2)])
    space = descriptor_space(described, [*SYNTHETIC, *["olive"] * 60, *["vowel"] * 40])
    assert space.unfamiliar["vowel"] == (40, 40) and space.unfamiliar["olive"][0] < 10
    assert space.within.mean() == pytest.approx(0.6 * 0.98, abs=0.02)
    # They lie apart in the picture, too.
    first = space.plane[:, 0] * np.sign(space.plane[-1, 0])
    assert first[-40:].min() > first[:360].max()


def test_components_are_those_of_scikit_learn():
    described = np.concatenate([cloud(300) * np.arange(1, F + 1), cloud(50, seed=1)])
    described[:, 3] = described[:, 4]
    space = descriptor_space(described, [*SYNTHETIC, *["olive"] * 50])
    center = np.median(described[:300], axis=0)
    spread = np.subtract(*np.quantile(described[:300], (0.75, 0.25), axis=0)) / 1.349  # of the standard normal
    pca = PCA(2).fit(np.arcsinh(np.clip((described - center) / spread, -10, 10)))
    np.testing.assert_allclose(space.explained, pca.explained_variance_ratio_, rtol=1e-6)
    np.testing.assert_allclose(space.plane.var(axis=0, ddof=1), pca.explained_variance_, rtol=1e-6)


def test_a_descriptor_is_judged_where_it_is_known():
    described = np.concatenate([cloud(300), cloud(100, seed=1)])
    described[:, 5] = np.nan
    described[300:350, 6] = np.nan
    described[350:, 6] = 99.0
    space = descriptor_space(described, [*SYNTHETIC, *["olive"] * 100])
    names = list(DESCRIPTORS)
    assert names[5] not in space.names and space.within[space.names.index(names[6])] == 0
    assert space.as_dict()["within"][names[6]] == 0 and space.as_dict()["boundaries"] == {"synthetic": 300, "open": 100}


@pytest.mark.parametrize("sources", [SYNTHETIC, ["synthetic_gaussian"] * 200 + ["olive"] * 100, ["olive"] * 300])
def test_without_both_kinds_there_is_nothing_to_tell(sources):
    assert descriptor_space(cloud(300), sources) is None


def test_the_page_of_records_tells_it_where_there_are_both_kinds(records, tmp_path):
    assert "surround open ones?" not in records_page(records).html()
    both = RecordsFile(tmp_path / "both.sqlite", create=True)
    for trajectory in records.trajectories():
        source = "olive" if trajectory.source == "synthetic_rectified" else trajectory.source
        both.store(replace(trajectory, source=source))
    html = records_page(both).html()
    assert "Do synthetic boundaries surround open ones?" in html
    assert "wa, in the plane of two principal components" in html and "ewc, in the plane" in html
