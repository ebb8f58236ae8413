import numpy as np
import pytest

from hyperforecast.checks import InputError
from hyperforecast.forecasting.familiarity import FAMILIAR_SHARE, REFERENCE_ROWS, Familiarity
from hyperforecast.storage import Bundle, read_bundle_file, write_bundle_file

NAMES = [f"descriptor_{i}" for i in range(12)]


def assess(familiarity, vector):
    """The verdict on a vector of descriptors in the order of the names."""
    return familiarity.assess(dict(zip(familiarity.names.tolist(), vector)))


def simulated_records(rng, n_sources=15, per_source=40, n_missing=.1):
    """Descriptors of very different units, with an effect of the source; some missing, one skewed."""
    sources = np.repeat([f"source {i}" for i in range(n_sources)], per_source)
    Z = np.repeat(rng.normal(size=(n_sources, 12)), per_source, axis=0) + .4 * rng.normal(size=(len(sources), 12))
    D = 5 + Z * np.logspace(-4, 4, 12)
    D[:, 3] = np.exp(2 * Z[:, 3])
    D[rng.random(D.shape) < n_missing] = np.nan
    return D, sources


@pytest.fixture(scope="module")
def records():
    return simulated_records(np.random.default_rng(0))


@pytest.fixture(scope="module")
def familiarity(records):
    return Familiarity.fit(records[0], NAMES, records[1], seed=0)


def shifted(D, spreads):
    """A typical boundary moved by some spreads in every descriptor."""
    return np.nanmedian(D, axis=0) + spreads * (np.nanquantile(D, .84, axis=0) - np.nanmedian(D, axis=0))


def test_new_sources_of_the_same_kind_are_familiar():
    # Fitted on 30 sources; boundaries of 30 others drawn alike: the score is nearly uniform, so about 5% fall below 5%.
    D, sources = simulated_records(np.random.default_rng(1), n_sources=60, per_source=20)
    known = np.isin(sources, np.unique(sources)[:30])
    fitted = Familiarity.fit(D[known], NAMES, sources[known], seed=0)
    scores = np.array([assess(fitted, row).score for row in D[~known]])
    assert .35 < scores.mean() < .65
    assert np.mean(scores < FAMILIAR_SHARE) < .2


def test_own_source_is_left_out_of_the_calibration(records):
    # Sources far apart, each a tight clump: records are far from other sources, so a new clump is nothing special.
    rng = np.random.default_rng(2)
    sources = np.repeat(np.arange(30), 20)
    D = np.repeat(rng.normal(size=(30, 12)), 20, axis=0) + .01 * rng.normal(size=(600, 12))
    known = sources < 20
    fitted = Familiarity.fit(D[known], NAMES, sources[known], seed=0)
    assert np.mean([assess(fitted, row).familiar for row in D[~known]]) > .7
    assert fitted.distances.min() > .1


def test_strange_boundaries_are_flagged(records, familiarity):
    D, _ = records
    for spreads in (5, 20, 1e3, 1e150):
        verdict = assess(familiarity, shifted(D, spreads))
        assert not verdict.familiar and verdict.score < FAMILIAR_SHARE
        assert len(verdict.out_of_range) >= 11  # the skewed one reaches far
    assert assess(familiarity, shifted(D, 20)).distance > assess(familiarity, shifted(D, 5)).distance


def test_one_descriptor_far_beyond_its_range_is_enough(records, familiarity):
    D, _ = records
    low, high = np.nanquantile(D[:, 7], [.005, .995])
    for value, far in ((high + .9 * (high - low), False), (high + 1.1 * (high - low), True), (low - 1.1 * (high - low), True)):
        vector = shifted(D, 0)
        vector[7] = value
        why = assess(familiarity, vector).why
        assert any(one.startswith("descriptor_7 ") and "far beyond the records" in one for one in why) == far


@pytest.mark.parametrize("sign, fine, strange, words", [
    ("closest_classes", 1.3, 1.0, "two classes lie 1 times as far apart as chance"),
    ("cut_feature", .7, .8, "beyond 10 standard deviations in 80% of the rows"),
    ("rows_per_class", 2, 1, "a single row each")])
def test_signs_of_faults_count_whatever_the_records_know(sign, fine, strange, words, records, familiarity):
    usual = dict(zip(NAMES, shifted(records[0], 0)))
    assert familiarity.assess({**usual, sign: fine}).familiar and familiarity.assess({**usual, sign: np.nan}).familiar
    verdict = familiarity.assess({**usual, sign: strange})
    assert not verdict.familiar and verdict.score > .95 and len(verdict.why) == 1 and words in verdict.why[0]


def test_the_largest_numbers_are_no_trouble(records, familiarity):
    vector = shifted(records[0], 0)
    vector[0] = -1.7e308
    verdict = assess(familiarity, vector)
    assert not verdict.familiar and np.isfinite(verdict.distance)


def test_the_middle_is_utterly_typical(records, familiarity):
    verdict = assess(familiarity, shifted(records[0], 0))
    assert verdict.familiar and verdict.score > .95 and verdict.out_of_range == []


def test_an_odd_mixture_inside_all_ranges_is_flagged():
    # Two descriptors that go together in all records, but not in the boundary: each is in range, the pair is strange.
    rng = np.random.default_rng(3)
    sources = np.repeat(np.arange(10), 30)
    first = rng.normal(size=300)
    D = np.column_stack([first, first + .05 * rng.normal(size=300)])
    verdict = Familiarity.fit(D, ["a", "b"], sources, seed=0)
    verdict = assess(verdict, [1.5, -1.5])
    assert verdict.out_of_range == [] and not verdict.familiar


def test_out_of_range_names_value_and_range(records, familiarity):
    D, _ = records
    vector = shifted(D, 0)
    vector[7], vector[2] = 1e9, -3.0
    listed = assess(familiarity, vector).out_of_range
    assert [entry.name for entry in listed] == ["descriptor_7", "descriptor_2"]
    assert listed[0] == pytest.approx(("descriptor_7", 1e9, *np.nanquantile(D[:, 7], [.005, .995])))
    assert listed[1].value == -3.0


def test_missing_descriptors():
    rng = np.random.default_rng(4)
    D, sources = simulated_records(rng, n_missing=0)
    complete = Familiarity.fit(D, NAMES, sources, seed=0)
    assert not assess(complete, np.full(12, np.nan)).familiar
    D[rng.random(len(D)) < .5, 6:] = np.nan
    often_missing = Familiarity.fit(D, NAMES, sources, seed=0)
    vector = shifted(D, .5)
    vector[6:] = np.nan
    assert assess(often_missing, vector).familiar


def test_a_descriptor_that_no_record_knows_is_left_out(records):
    D, sources = records[0].copy(), records[1]
    vector = shifted(D, .5)
    D[:, 5] = np.nan
    fitted = Familiarity.fit(D, NAMES, sources, seed=0)
    verdict = assess(fitted, vector)
    vector[5] = np.nan
    assert verdict == assess(fitted, vector)


@pytest.mark.parametrize("constant", [0.0, .1, 1e9])
def test_a_constant_descriptor(records, constant):
    D, sources = records[0].copy(), records[1]
    D[:, 5] = constant * (1 + 1e-15 * (np.arange(len(D)) % 4))  # but for rounding
    fitted = Familiarity.fit(D, NAMES, sources, seed=0)
    vector = shifted(records[0], 0)
    vector[5] = constant
    assert assess(fitted, vector).score > .95
    vector[5] = constant * (1 + 1e-12)
    assert assess(fitted, vector).score > .95
    vector[5] = constant + 1e4
    verdict = assess(fitted, vector)
    assert not verdict.familiar and [entry.name for entry in verdict.out_of_range] == ["descriptor_5"]


def test_units_do_not_matter(records, familiarity):
    D, sources = records
    factors = 2.0 ** np.arange(-6, 6)
    rescaled = Familiarity.fit(D * factors, NAMES, sources, seed=0)
    vector = shifted(D, 1.5)
    assert assess(rescaled, vector * factors).distance == assess(familiarity, vector).distance


def test_distance_worked_out():
    # One descriptor with quartiles -1.349/2 and 1.349/2, so spread 1; the boundary at sinh(2), records at 0 or so.
    D = np.repeat([-1.349 / 2, 0, 1.349 / 2], [3, 3, 3])[:, None]
    fitted = Familiarity.fit(D, ["a"], [0, 1, 2] * 3, seed=0)
    nearest = np.arcsinh([1.349 / 2] * 3 + [0] * 2)
    assert assess(fitted, [np.sinh(2)]).distance == pytest.approx(np.mean(2 - nearest), rel=1e-6)
    # Each record's nearest of the other two sources: two alike, three beside it (at the ends: two beside, one beyond).
    beside = np.arcsinh(1.349 / 2)
    ends, middle = [0, 0, beside, beside, 2 * beside], [0, 0, beside, beside, beside]
    expected = [np.mean(middle)] * 3 + [np.mean(ends)] * 6
    assert fitted.distances == pytest.approx(expected, rel=1e-6)
    assert assess(fitted, [0]).score == 1


def test_as_far_as_the_records_counts_as_familiar():
    fitted = Familiarity.fit(np.ones((8, 2)), ["a", "b"], [0, 1] * 4, seed=0)
    assert (assess(fitted, [1, 1]).distance, assess(fitted, [1, 1]).score) == (0, 1)
    assert assess(fitted, [1, 2]).score == 0


def test_reference_records_are_even_over_the_sources():
    rng = np.random.default_rng(5)
    sources = np.repeat(["large", "middling", "small"], [5000, 300, 10])
    D = rng.normal(size=(len(sources), 2))
    D[:, 0] += 100 * (sources == "small")
    fitted = Familiarity.fit(D, ["a", "b"], sources, seed=0)
    assert fitted.reference.shape == (REFERENCE_ROWS, 2) and fitted.reference.dtype == np.float32
    assert (fitted.reference[:, 0] > 4).sum() == 10


def test_the_seed_decides(records):
    D, sources = records
    first, again, other = (Familiarity.fit(D, NAMES, sources, seed=seed) for seed in (1, 1, 2))
    assert np.array_equal(first.reference, again.reference, equal_nan=True)
    assert not np.array_equal(first.reference, other.reference, equal_nan=True)


def test_round_trip_through_a_file(records, familiarity, tmp_path):
    write_bundle_file(tmp_path / "f", Bundle("familiarity", 1, {}, familiarity.to_arrays("near_")))
    bundle, _ = read_bundle_file(tmp_path / "f", "familiarity", newest=1)
    again = Familiarity.from_arrays(bundle.arrays, "near_")
    for row in records[0][:20]:
        assert assess(again, row) == assess(familiarity, row)


@pytest.mark.parametrize("name, change", [
    ("names", lambda a: np.arange(12)),
    ("low", lambda a: a[:-1]),
    ("low", lambda a: a + np.inf),
    ("high", lambda a: a - 1e9),
    ("centre", lambda a: a * np.inf),
    ("scale", lambda a: a * 0),
    ("scale", lambda a: np.where(np.arange(12) == 3, np.nan, a)),
    ("reference", lambda a: a[:, 1:]),
    ("reference", lambda a: a[:0]),
    ("reference", lambda a: np.where(np.isnan(a), np.float32(np.inf), a)),
    ("distances", lambda a: a[1:]),
    ("distances", lambda a: -a - 1),
    ("distances", lambda a: None),
])
def test_altered_arrays_are_refused(familiarity, name, change):
    arrays = familiarity.to_arrays("near_")
    arrays[f"near_{name}"] = change(arrays[f"near_{name}"])
    with pytest.raises(InputError, match="near_"):
        Familiarity.from_arrays(arrays, "near_")


@pytest.mark.parametrize("call, parameter", [
    (lambda D, sources: Familiarity.fit(D, NAMES[1:], sources, seed=0), "D"),
    (lambda D, sources: Familiarity.fit(D * np.inf, NAMES, sources, seed=0), "D"),
    (lambda D, sources: Familiarity.fit(D[:0], NAMES, sources[:0], seed=0), "D"),
    (lambda D, sources: Familiarity.fit(D, NAMES, sources[1:], seed=0), "sources"),
    (lambda D, sources: Familiarity.fit(D, NAMES, ["one"] * len(D), seed=0), "sources"),
    (lambda D, sources: assess(Familiarity.fit(D, NAMES, sources, seed=0), np.full(12, np.inf)), "descriptors"),
])
def test_bad_input_is_refused(records, call, parameter):
    with pytest.raises(InputError) as caught:
        call(np.where(np.isnan(records[0]), 1.0, records[0]), records[1])
    assert caught.value.parameter == parameter
