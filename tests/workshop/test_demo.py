"""The demo: six deliveries learned in two ways, and a page that needs nothing else."""

import re
from html.parser import HTMLParser

import numpy as np
import pytest

from hyperforecast.settings import Settings
from hyperforecast.workshop import demo
from hyperforecast.workshop.reporting.demo_report import CAUTION, demo_page
from hyperforecast.workshop.streams.salvage_yard import DELIVERIES, FAMILIES

SEED = 3


@pytest.fixture(scope="module")
def deliveries(forecasters):
    seen = []
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(demo, "load_forecaster", forecasters.get)
        result = demo.run_demo(seed=SEED, progress=seen.append)
    assert seen == result
    return result


@pytest.fixture(scope="module")
def page(deliveries):
    return demo_page(deliveries, seed=SEED).html()


def test_every_delivery_is_judged_on_all_families_so_far(deliveries):
    assert [(one.number, one.families) for one in deliveries] == list(enumerate(DELIVERIES, 1))
    for one in deliveries:
        seen = 3 * one.number
        for accuracy in (one.advised, one.constant):
            assert accuracy.shape == (18,) and np.isnan(accuracy[seen:]).all()
            assert ((accuracy[:seen] >= 0) & (accuracy[:seen] <= 1)).all()


def test_both_ways_begin_alike_and_then_each_has_its_own_settings(deliveries, forecasters):
    first, later = deliveries[0], deliveries[1:]
    assert first.advice is None
    np.testing.assert_array_equal(first.advised, first.constant)
    # Three families that have nothing to forget are told apart well above one in three.
    assert np.nanmean(first.advised) > 0.6
    for one in later:
        assert one.advice.forecaster is forecasters["wa"] and one.advice.settings.checked("wa")
        assert isinstance(one.constant_settings, Settings) and one.constant_settings.checked("wa")
    assert any(one.advice.settings != one.constant_settings for one in later)


def test_the_page_tells_of_every_family_and_delivery(page, deliveries):
    for family in FAMILIES:
        # A picture of its parts, and a row in each of the two tables.
        assert page.count(f"<span>{family}</span>") == 1
        assert len(re.findall(rf"<th[^>]*>{family}</th>", page)) == 2
    for one in deliveries:
        assert f"Delivery {one.number}: some of its parts" in page
    assert f"{np.nanmean(deliveries[-1].advised):.0%}" in page and f"{np.nanmean(deliveries[-1].constant):.0%}" in page
    for reason in deliveries[-1].advice.reasons:
        assert str(reason) in page
    assert CAUTION in page


def test_the_page_needs_nothing_from_elsewhere(page):
    references, tags = [], []
    pointing = ("src", "href", "xlink:href", "action", "data", "srcset", "poster", "background")

    class Reader(HTMLParser):
        def handle_starttag(self, tag, attributes):
            tags.append(tag)
            references.extend(value for name, value in attributes if name in pointing)

    Reader().feed(page)
    assert references and all(one.startswith(("data:image/", "#")) for one in references)
    assert not {"script", "link", "iframe", "object", "embed", "base", "form"} & set(tags)
    assert not re.search(r"@import|url\((?!['\"]?(#|data:))", page)
