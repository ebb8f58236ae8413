"""Reports, checked as a browser and a careful reader would: well-formed, self-contained, nothing unescaped."""

import base64
import io
import re
from html.parser import HTMLParser
from xml.etree import ElementTree

import matplotlib
import numpy as np
import pytest
from PIL import Image

from hyperforecast.workshop.reporting import charts
from hyperforecast.workshop.reporting.page import Page, plain, shown

HOSTILE = '</title></svg><script>alert("x")</script>\'"><img src=x onerror=alert(1)>$\\frac{&amp;\x00\x1b[31m\u202e'
# HTML standard, section 13.1.2: elements that have no end tag.
VOID = {"meta", "img", "br", "hr", "link", "input", "col", "area", "base", "embed", "source", "track", "wbr"}


class Reader(HTMLParser):
    """Walks a page; notes every element and every text, and stops at the first tag that does not fit."""

    def __init__(self, page):
        super().__init__()
        self.open, self.elements, self.texts = [], [], []
        self.feed(page)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        assert len(dict(attributes)) == len(attributes), f"an attribute of <{tag}> comes twice"
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attributes):
        self.elements.append((tag, dict(attributes)))
        assert "svg" in self.open, f"<{tag}/> outside SVG"

    def handle_endtag(self, tag):
        assert self.open and self.open.pop() == tag, f"</{tag}> closes nothing that is open"

    def handle_data(self, data):
        self.texts.append(data)


def _every_chart(name):
    shares = np.linspace(0.9, 0.5, 5)
    points = np.stack([shares, shares - 0.1, shares + 0.1, shares[::-1]], axis=1)
    return [
        charts.line_chart(name, {name: shares, "_b": [np.nan, *shares[1:]]}, y_label=name, x_label=name, shares=True),
        charts.line_chart(name, {name: [1e-4, 1e-2, 1e-3]}, y_label=name, logarithmic=True, first=2),
        charts.expected_and_achieved(name, {name: points, "new classes": points[:0]}),
        charts.interval_chart(name, [name] * 5, {name: points[:, :3], "other": points[:, :3] - 1}, x_label=name),
        charts.search_curve(name, {name: [0.2, np.nan, 0.6, 0.4]}, {name + "2": 0.5}, y_label=name),
        charts.outlook_chart(name, [1, 3, 9, 27, 80], {name: shares, "old": shares - 0.1}, low=shares - 0.2,
                             high=shares + 0.1, marks={name: 12.0}, x_label=name, limit=80),
        charts.plane_chart(name, np.geomspace(1e-3, 1, 5), np.geomspace(1, 100, 5), np.tile(shares, (5, 1)) - 0.5,
                           good=np.eye(5) > 0, shut=np.eye(5)[::-1] > 0, marks={name: (0.1, 10.0), "constant": (0.01, 2.0)},
                           x_label=name, y_label=name),
    ]


def _full_page(name):
    page = Page(name, name)
    for heading in (name, "second", "third"):
        page.section(heading)
    page.paragraph(name)
    page.facts({name: name, "boundaries": 6})
    page.table([name, "accuracy", "note"], [[name, 0.5, None], ["b", np.float32(0.25), name]], caption=name)
    page.heat_tables({name: [[1.0, 0.25], [np.nan, 0.0]]}, rows=[name, "b"], columns=[name, "2"], caption=name)
    page.charts(*_every_chart(name), caption=name)
    page.pictures([(name, np.random.default_rng(0).random((3, 8, 8)))], caption=name)
    return page


@pytest.fixture(scope="module")
def hostile_page():
    return _full_page(HOSTILE).html()


def test_page_is_well_formed_and_ids_are_unique(hostile_page):
    reader = Reader(hostile_page)
    assert hostile_page.startswith("<!DOCTYPE html>")
    ids = [attributes["id"] for _, attributes in reader.elements if "id" in attributes]
    assert len(ids) == len(set(ids))
    pointed = re.findall(r'url\(#([^)]+)\)|href="#([^"]+)"', hostile_page)
    assert len(pointed) > 10 and {a or b for a, b in pointed} <= set(ids)


def test_nothing_is_loaded_and_nothing_runs(hostile_page):
    reader = Reader(hostile_page)
    assert not {tag for tag, _ in reader.elements} & {"script", "iframe", "object", "embed", "link", "base", "form"}
    for tag, attributes in reader.elements:
        assert not [name for name in attributes if name.startswith("on")]
        for name in ("src", "href", "xlink:href", "data", "action"):
            assert attributes.get(name, "#").startswith(("#", "data:image/png;base64,")), (tag, attributes)
    assert "http:" not in hostile_page and "https:" not in hostile_page and "@import" not in hostile_page
    # Even a mistake of ours could load nothing: the page's own policy says so.
    policy = [a["content"] for tag, a in reader.elements if a.get("http-equiv") == "Content-Security-Policy"]
    assert policy and policy[0].startswith("default-src 'none'") and "script" not in policy[0]


def test_hostile_labels_arrive_as_text(hostile_page):
    reader = Reader(hostile_page)
    assert [tag for tag, _ in reader.elements].count("img") == 1
    line = plain(HOSTILE)
    assert '<script>alert("x")</script>' in line and not re.search("[\x00-\x1f\u202e]", line)
    # Title, heading, lead, cells, captions: the text comes back whole.
    assert reader.texts.count(line) >= 15
    assert not re.search("[\x00-\x08\x0b-\x1f\u202e]", hostile_page)


def test_labels_in_any_script_and_of_any_length_are_drawn():
    for name in ("螺母", "шайба", "🔩" * 40, "x" * 500, "_hidden", "", "$x$"):
        reader = Reader(_full_page(name).html())
        assert [tag for tag, _ in reader.elements].count("svg") == 7
        assert not name or any(plain(name)[:20] in text for text in reader.texts)


def test_series_that_begin_with_an_underscore_keep_their_legend():
    drawing = charts.line_chart("t", {"_a": [0.1, 0.2], "b": [0.2, 0.3]}, y_label="y").drawing
    texts = ["".join(element.itertext()).strip("\u200b \n") for element in drawing.iter("text")]
    assert "_a" in texts and "b" in texts


def test_charts_leave_matplotlib_as_it_was():
    from matplotlib import pyplot

    before = dict(matplotlib.rcParams)
    figures = pyplot.get_fignums()
    _every_chart("a")
    assert dict(matplotlib.rcParams) == before
    assert pyplot.get_fignums() == figures


def test_charts_are_the_same_each_time():
    first, second = ([chart.markup("p-") for chart in _every_chart("a")] for _ in range(2))
    assert first == second


def _points(drawing):
    """Positions of the markers, from the SVG: (x, y) of every <use>, rightwards and downwards."""
    groups = [group for group in drawing.iter("g") if re.match("[xy]tick|legend", group.get("id", ""))]
    others = {use for group in groups for use in group.iter("use")}
    return np.array([(float(use.get("x")), float(use.get("y"))) for use in drawing.iter("use") if use not in others])


def test_lines_go_where_the_numbers_say():
    x, y = _points(charts.line_chart("t", {"a": [0.2, 0.4, np.nan, 0.8]}, y_label="y", shares=True).drawing).T
    # Boundaries 1, 2 and 4; SVG's y axis points down.
    assert (x[2] - x[1]) / (x[1] - x[0]) == pytest.approx(2, abs=1e-3)
    assert (y[1] - y[2]) / (y[0] - y[1]) == pytest.approx(2, abs=1e-3)


def test_logarithmic_axis_spaces_ratios_evenly():
    _, y = _points(charts.line_chart("t", {"a": [1e-4, 1e-3, 1e-1]}, y_label="y", logarithmic=True).drawing).T
    assert (y[1] - y[2]) / (y[0] - y[1]) == pytest.approx(2, abs=1e-3)


@pytest.mark.parametrize("values", [[3e-4, 3e-4], [12, 30], [0.0123], [1e-5, 1.0]])
def test_logarithmic_axis_always_has_tick_labels(values):
    drawing = charts.line_chart("t", {"a": values}, y_label="y", logarithmic=True).drawing
    ticks = [group for group in drawing.iter("g") if group.get("id", "").startswith("ytick")]
    numbers = ["".join(group.itertext()).strip() for group in ticks]
    assert [float(number) for number in numbers if number]


def test_points_outside_their_interval_are_ringed():
    points = [[0.5, 0.4, 0.6, 0.55], [0.5, 0.4, 0.6, 0.61], [0.5, 0.4, 0.6, 0.1]]
    # Three points and two rings.
    assert len(_points(charts.expected_and_achieved("t", {"old": points}).drawing)) == 5


def test_search_curve_keeps_the_best():
    _, y = _points(charts.search_curve("t", {"a": [0.3, 0.1, np.nan, 0.6]}, y_label="y").drawing).T
    assert (np.diff(y) <= 0).all() and y[-1] < y[0]


def test_a_plane_outlines_and_hatches_what_it_is_told_to():
    def drawn(good, shut):
        plain_plane = {"x": np.geomspace(0.01, 1, 6), "y": np.geomspace(1, 100, 6), "behind": np.zeros((6, 6))}
        chart = charts.plane_chart("plane", **plain_plane, good=good, shut=shut, marks={"advised": (0.1, 10.0)},
                                   x_label="rate", y_label="strength")
        return chart.markup("")

    none, square = np.zeros((6, 6), bool), np.zeros((6, 6), bool)
    square[2:4, 2:4] = True
    assert "<pattern" in drawn(none, square) and "<pattern" not in drawn(square, none)
    assert "stroke-width: 1.8" in drawn(square, none) and "stroke-width: 1.8" not in drawn(none, none)


def test_lines_differ_without_colour():
    series = {f"policy {number}": [number, number + 1] for number in range(8)}
    drawing = charts.line_chart("t", series, y_label="y").drawing
    dashes = set()
    for path in drawing.iter("path"):
        style = path.get("style", "")
        if "stroke-width: 1.6" in style:
            dashes.add(re.sub("stroke: #[0-9a-f]+", "", style))
    assert len(dashes) == 8


def test_pictures_come_back_as_they_went_in():
    pictures = np.random.default_rng(1).random((2, 5, 7))
    page = Page("t", "l")
    page.pictures([("a", pictures)], caption="c")
    source = next(a["src"] for tag, a in Reader(page.html()).elements if tag == "img")
    with Image.open(io.BytesIO(base64.b64decode(source.partition(",")[2]))) as image:
        levels = np.asarray(image)
    assert np.array_equal(levels, np.round(255 * np.concatenate(list(pictures), axis=1)))


def test_heat_cells_darken_and_stay_readable():
    page = Page("t", "l")
    page.heat_tables({"advice": [[0.0, 0.5, 1.0, np.nan]]}, rows=["a"], columns=list("1234"), caption="c")
    cells = re.findall(r"<td style=\"background:rgb\((\d+),(\d+),(\d+)\)\">(\d+)</td>", page.html())
    assert [int(cell[3]) for cell in cells] == [0, 50, 100]
    # Relative luminance and contrast by WCAG 2.1 (formulas from memory); AA asks for 4.5 : 1.
    contrasts = []
    for cell in cells:
        levels = np.array(cell[:3], dtype=float) / 255
        linear = np.where(levels <= 0.03928, levels / 12.92, ((levels + 0.055) / 1.055) ** 2.4)
        contrasts.append((linear @ [0.2126, 0.7152, 0.0722] + 0.05) / 0.06)
    assert contrasts[0] > contrasts[1] > contrasts[2] > 4.5


def test_numbers_are_shown_in_three_digits():
    given = [0.5, 0.123456, 1e-5, 12345.678, 0.0995, 7, np.float32(0.25), np.nan, None, True, "a\nb"]
    assert [shown(value) for value in given] == [
        "0.500", "0.123", "1e-05", "1.23e+04", "0.100", "7", "0.250", "–", "–", "True", "a b",
    ]


def test_rows_that_do_not_fit_are_refused():
    page = Page("t", "l")
    with pytest.raises(ValueError):
        page.table(["a", "b"], [["x", 1, 2]], caption="c")
    with pytest.raises(ValueError):
        page.heat_tables({"a": [[1.0]]}, rows=["x", "y"], columns=["1"], caption="c")


def test_written_file_is_the_page_and_nothing_else_is_left(tmp_path):
    page = _full_page("washer")
    page.write(tmp_path / "report.html")
    assert [path.name for path in tmp_path.iterdir()] == ["report.html"]
    assert (tmp_path / "report.html").read_text(encoding="utf-8") == page.html()


def test_drawing_stands_alone_as_xml():
    for chart in _every_chart(HOSTILE):
        assert ElementTree.fromstring(chart.markup("p-")).get("role") == "img"
