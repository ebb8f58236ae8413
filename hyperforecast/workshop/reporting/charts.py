"""Charts of a report, drawn to be read on paper without colours and on a phone.

Every chart is one small panel of the same width: line styles, markers and fills differ, not colours alone.
Nothing registers with matplotlib's pyplot and its settings are left as they were.
"""

import io
import warnings
from dataclasses import dataclass
from xml.etree import ElementTree

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from hyperforecast.workshop.reporting.page import plain

_INK = "#1c1b19"
_SOFT = "#8c867b"
_STYLE = {
    "font.size": 10.5, "legend.fontsize": 10.5, "legend.frameon": False,
    "axes.spines.top": False, "axes.spines.right": False, "axes.edgecolor": _SOFT,
    "axes.linewidth": 0.8, "axes.grid": True, "axes.axisbelow": True, "grid.color": "#e4e0d8", "grid.linewidth": 0.6,
    "xtick.color": _INK, "ytick.color": _INK, "xtick.major.size": 3.0, "ytick.major.size": 3.0, "text.color": _INK,
    "axes.labelcolor": _INK, "figure.facecolor": "none", "axes.facecolor": "none", "lines.linewidth": 1.6,
    "lines.markersize": 5.0, "svg.fonttype": "none", "svg.hashsalt": "hyperforecast", "text.parse_math": False,
}
_WIDTH, _HEIGHT = 360, 225  # points; a phone's width, so that text keeps its size there
_LONGEST_LABEL = 26
_MOST_MARKERS = 12
_CROWD = 60
_MOST_POINTS = 400
# Farther behind the best than this is all one shade.
_MOST_BEHIND = 0.2

# Colour, line style and marker of the first, second, ... series.
_LOOKS = (
    ("#1c1b19", "-", "o"), ("#b4491a", "--", "s"), ("#1f6f8b", "-.", "^"), ("#6f7f1c", ":", "D"),
    ("#7b4f8f", (0, (6, 1, 1, 1, 1, 1)), "v"), ("#a07d1a", (0, (1, 2)), "P"), ("#4f6b5d", (0, (8, 3)), "X"),
    ("#94365a", (0, (3, 1)), "*"),
)


@dataclass(frozen=True)
class Chart:
    """A finished chart.

    Attributes
    ----------
    title : str
        Shown above it, and read aloud in its place.
    drawing : xml.etree.ElementTree.Element
        SVG, without namespaces, as it stands inside HTML.
    """

    title: str
    drawing: ElementTree.Element

    def markup(self, prefix):
        """Return the SVG as text, with `prefix` before every id so that charts on one page do not meet."""
        drawing = ElementTree.fromstring(ElementTree.tostring(self.drawing))
        for element in drawing.iter():
            for name, value in element.attrib.items():
                if name == "id":
                    element.set(name, prefix + value)
                elif name == "href":
                    element.set(name, f"#{prefix}{value[1:]}")
                elif "url(#" in value:
                    element.set(name, value.replace("url(#", f"url(#{prefix}"))
        drawing.set("aria-label", plain(self.title))
        return ElementTree.tostring(drawing, encoding="unicode")


def line_chart(title, series, *, y_label, x_label="boundary", first=1, logarithmic=False, shares=False,
               ringed=()):
    """Return lines over boundaries, one for each series.

    Parameters
    ----------
    title : str
    series : mapping of str to sequence of float
        Values at boundaries `first`, first + 1, ...; NaN leaves a gap.
    y_label, x_label : str
    first : int
        The first boundary's number.
    logarithmic : bool
        Whether the vertical axis is; values must then be positive.
    shares : bool
        Whether values are shares from 0 to 1, shown as percentages.
    ringed : sequence of int
        Places, from 0, at which every line's point is ringed.
    """
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel(x_label, y_label)
        handles = []
        for number, values in enumerate(series.values()):
            values = np.asarray(values, dtype=np.float64)
            look = {**_look(number), "markevery": max(1, len(values) // _MOST_MARKERS)}
            handles += axes.plot(np.arange(first, first + len(values)), values, **look)
            axes.plot(first + np.array(ringed, dtype=int), values[list(ringed)], "o", markersize=10, color=_INK,
                      fillstyle="none", markeredgewidth=0.8)
        _whole_numbers(axes.xaxis)
        if logarithmic:
            _logarithmic(axes.yaxis)
        if shares:
            axes.yaxis.set_major_formatter(FuncFormatter(_percentage))
            axes.set_ylim(0, 1.03)
        _legend(figure, handles, series)
        return _finished(figure, title)


def search_curve(title, curves, references=None, *, y_label):
    """Return the best value found so far against attempts spent.

    Parameters
    ----------
    title : str
    curves : mapping of str to sequence of float
        Value of each attempt in order (shares from 0 to 1); NaN is an attempt that failed.
    references : mapping of str to float, optional
        Values reached without a search, drawn as level lines.
    y_label : str
    """
    references = references or {}
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel("attempts", y_label)
        handles = []
        for number, values in enumerate(curves.values()):
            best = np.fmax.accumulate(np.asarray(values, dtype=np.float64))
            look = {**_look(number), "markevery": 0.12}
            handles += axes.plot(np.arange(1, len(best) + 1), best, drawstyle="steps-post", **look)
        for number, value in enumerate(references.values(), len(curves)):
            handles.append(axes.axhline(value, **{**_look(number), "marker": "none"}))
        axes.set_xscale("log", base=2)
        axes.xaxis.set_major_formatter(FuncFormatter(_number))
        axes.yaxis.set_major_formatter(FuncFormatter(_percentage))
        _legend(figure, handles, [*curves, *references])
        return _finished(figure, title)


def expected_and_achieved(title, groups):
    """Return what was expected, with its intervals, against what was achieved.

    A point whose bar crosses the diagonal was covered by its interval; the others are ringed.

    Parameters
    ----------
    title : str
    groups : mapping of str to array of shape (n, 4)
        Columns expected, low, high, achieved: shares from 0 to 1.
    """
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel("expected, with its interval", "achieved", height=285)
        axes.plot([0, 1], [0, 1], color=_SOFT, linewidth=1.0, linestyle="-", zorder=1)
        # Many points are drawn finer.
        fine = 1.0 if sum(map(len, groups.values())) <= _CROWD else 0.5
        handles = []
        for number, points in enumerate(groups.values()):
            expected, low, high, achieved = np.asarray(points, dtype=np.float64).reshape(-1, 4).T
            look = {**_look(number), "linestyle": "none", "markersize": 5 * fine}
            axes.hlines(achieved, low, high, color=look["color"], linewidth=0.9 * fine**2)
            handles += axes.plot(expected, achieved, **look)
            missed = (achieved < low) | (achieved > high)
            axes.plot(expected[missed], achieved[missed], "o", markersize=10 * fine, color=_INK, fillstyle="none",
                      markeredgewidth=0.8)
        for axis in (axes.xaxis, axes.yaxis):
            axis.set_major_formatter(FuncFormatter(_percentage))
        axes.set(xlim=(-0.02, 1.02), ylim=(-0.02, 1.02), aspect="equal")
        _legend(figure, handles, groups, lines=False)
        return _finished(figure, title)


def scatter_chart(title, groups, *, x_label, y_label):
    """Return points in a plane, the first group small and light behind the others, which are hollow.

    Parameters
    ----------
    title : str
    groups : mapping of str to array of shape (n, 2)
        Of each at most `_MOST_POINTS` are drawn, evenly.
    x_label, y_label : str
    """
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel(x_label, y_label, height=285)
        handles = []
        for number, points in enumerate(groups.values()):
            points = np.asarray(points, dtype=np.float64).reshape(-1, 2)
            points = points[np.linspace(0, len(points) - 1, min(_MOST_POINTS, len(points))).astype(int)]
            look = {"marker": ".", "color": _SOFT, "markersize": 3} if number == 0 else {
                **_look(number - 1), "markersize": 4, "fillstyle": "none", "markeredgewidth": 0.8}
            handles += axes.plot(*points.T, **{**look, "linestyle": "none"})
        _legend(figure, handles, groups, lines=False)
        return _finished(figure, title)


def interval_chart(title, names, series, *, x_label, marks=(0.0, 1.0), shares=False):
    """Return points with intervals for each name, one row per name, one marker per series.

    Parameters
    ----------
    title : str
    names : sequence of str
        Of the rows, from top to bottom (sources, say).
    series : mapping of str to array of shape (len(names), 3)
        Columns value, low, high, drawn as a bar from the first mark with a whisker; low and high may be NaN.
    x_label : str
    marks : sequence of float
        Where upright lines help the eye; bars begin at the first.
    shares : bool
        Whether values are shares from 0 to 1, shown as percentages.
    """
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel(x_label, "", height=60 + len(names) * (8 + 12 * len(series)))
        thickness = 0.8 / max(len(series), 1)
        handles = []
        for number, values in enumerate(series.values()):
            value, low, high = np.asarray(values, dtype=np.float64).reshape(-1, 3).T
            at = np.arange(len(names)) + (number - (len(series) - 1) / 2) * thickness
            look = {**_look(number), "linestyle": "none"}
            axes.barh(at, value - marks[0], 0.75 * thickness, left=marks[0], color=look["color"], alpha=0.3)
            axes.hlines(at, low, high, color=look["color"], linewidth=1.2)
            handles += axes.plot(value, at, **look)
        for mark in marks:
            axes.axvline(mark, color=_SOFT, linewidth=1.0, zorder=1)
        axes.set_yticks(np.arange(len(names)), [_short(name) for name in names])
        axes.set_ylim(len(names) - 0.4, -0.6)
        axes.grid(False, axis="y")
        axes.xaxis.set_major_formatter(FuncFormatter(_percentage if shares else _number))
        _legend(figure, handles, series, lines=False)
        return _finished(figure, title)


def change_chart(title, names, before, after, notes):
    """Return shares before and after, one row for each name: hollow and full markers, dashed where it is a loss.

    Parameters
    ----------
    title : str
    names : sequence of str
        Of the rows, from top to bottom.
    before, after : sequences of float
        Shares from 0 to 1; NaN where not known.
    notes : sequence of str
        Written at the right of each row.
    """
    before, after = (np.asarray(values, dtype=np.float64) for values in (before, after))
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel("accuracy", "", height=60 + 15 * len(names))
        at = np.arange(len(names))
        for lost, style in ((False, "-"), (True, (0, (3, 2)))):
            rows = (after < before) if lost else (after >= before)
            axes.hlines(at[rows], before[rows], after[rows], color=_INK, linewidth=1.4, linestyles=[style])
        handles = axes.plot(before, at, "o", color=_INK, fillstyle="none", markersize=7)
        handles += axes.plot(after, at, "s", color=_INK, markersize=5)
        for place, note in enumerate(notes):
            axes.annotate(plain(note), (1, place), (4, 0), xycoords=("axes fraction", "data"),
                          textcoords="offset points", va="center", fontsize=9, color=_SOFT)
        axes.set_yticks(at, [_short(name) for name in names])
        axes.set(xlim=(-0.02, 1.04), ylim=(len(names) - 0.4, -0.6))
        axes.grid(False, axis="y")
        axes.xaxis.set_major_formatter(FuncFormatter(_percentage))
        _legend(figure, handles, ["before", "after"], lines=False)
        return _finished(figure, title)


def outlook_chart(title, values, lines, *, low, high, marks, x_label, y_label="expected accuracy", limit=None):
    """Return expected accuracies along a setting, with the interval of the first of them as a band.

    Parameters
    ----------
    title : str
    values : sequence of float
        Of the setting, ascending, above 0; the axis is logarithmic.
    lines : mapping of str to sequence of float
        Shares from 0 to 1.
    low, high : sequence of float
        The band around the first line.
    marks : mapping of str to float
        Named values of the setting, drawn as upright lines.
    x_label, y_label : str
    limit : float, optional
        The largest value that is allowed; the end of the axis is marked with it.
    """
    with matplotlib.rc_context(_STYLE):
        figure, axes = _panel(x_label, y_label)
        axes.fill_between(values, low, high, color=_SOFT, alpha=0.25, linewidth=0)
        handles = []
        for number, line in enumerate(lines.values()):
            handles += axes.plot(values, line, **{**_look(number), "markevery": 0.15})
        for number, value in enumerate(marks.values(), len(lines)):
            handles.append(axes.axvline(value, **{**_look(number), "marker": "none", "color": _INK, "linewidth": 1.2}))
        names = [*lines, *marks]
        if limit is not None:
            handles.append(axes.axvspan(limit, 1.25 * limit, facecolor="none", edgecolor=_SOFT, hatch="///",
                                        linewidth=0))
            names.append("beyond the memory limit")
        _logarithmic(axes.xaxis)
        axes.yaxis.set_major_formatter(FuncFormatter(_percentage))
        axes.set_ylim(0, 1.03)
        _legend(figure, handles, names)
        return _finished(figure, title)


def plane_chart(title, x, y, behind, *, good, shut, marks, x_label, y_label):
    """Return how far settings stay behind the best over the plane of two of them.

    The darker, the farther behind; the good region is outlined, what should not be taken is hatched.

    Parameters
    ----------
    title : str
    x, y : sequences of float, of length n and m
        Above 0 and evenly spaced on a logarithmic scale.
    behind : array of shape (m, n)
        Points of accuracy, shares from 0 to 1.
    good, shut : arrays of shape (m, n), bool
        The region to stay in, and settings that may well diverge.
    marks : mapping of str to (float, float)
        Named points (x, y).
    x_label, y_label : str
    """
    behind = np.maximum(np.asarray(behind, dtype=np.float64), 0)
    with matplotlib.rc_context({**_STYLE, "axes.grid": False, "hatch.linewidth": 0.6, "hatch.color": _INK}):
        figure, axes = _panel(x_label, y_label, height=285)
        # Eleven greys that black marks still stand out from, the last for all that lies beyond.
        shades = axes.contourf(x, y, behind, levels=np.linspace(0, _MOST_BEHIND, 11), extend="max",
                               colors=[str(grey) for grey in np.linspace(1, 0.5, 11)])
        axes.set_xscale("log")
        axes.set_yscale("log")
        if np.any(shut):
            axes.contourf(x, y, np.asarray(shut, dtype=float), levels=[0.5, 1.5], colors="none", hatches=["////"])
        if np.any(good):
            axes.contour(x, y, np.asarray(good, dtype=float), levels=[0.5], colors=[_INK], linewidths=1.8)
        handles = []
        for number, (across, up) in enumerate(marks.values()):
            look = {**_look(number), "linestyle": "none", "markersize": 9, "markeredgecolor": "white"}
            handles += axes.plot(across, up, **look)
        for axis in (axes.xaxis, axes.yaxis):
            axis.set_major_locator(LogLocator(numticks=7))
            axis.set_major_formatter(FuncFormatter(_number))
            axis.set_minor_formatter(NullFormatter())
        bar = figure.colorbar(shades, ax=axes, shrink=0.9)
        bar.ax.yaxis.set_major_formatter(FuncFormatter(_percentage))
        bar.set_label("behind the best")
        _legend(figure, handles, marks, lines=False)
        return _finished(figure, title)


def _panel(x_label, y_label, height=_HEIGHT):
    figure = Figure(figsize=(_WIDTH / 72, height / 72), layout="constrained")
    axes = figure.add_subplot()
    axes.set(xlabel=_short(x_label, 40), ylabel=_short(y_label, 30))
    return figure, axes


def _look(number):
    color, style, marker = _LOOKS[number % len(_LOOKS)]
    # A second round is hollow.
    fill = "full" if number < len(_LOOKS) else "none"
    return {"color": color, "linestyle": style, "marker": marker, "fillstyle": fill}


def _short(text, longest=_LONGEST_LABEL):
    text = plain(text)
    return text if len(text) <= longest else text[: longest - 1] + "…"


def _legend(figure, handles, names, *, lines=True):
    if len(handles) > 1:
        # Matplotlib leaves out labels that begin with an underscore, unless something stands before it.
        labels = ["\u200b" * name.startswith("_") + name for name in map(_short, names)]
        columns = 2 if max(map(len, labels)) <= 16 else 1
        # Room for the legend comes on top of the axes' own.
        figure.set_figheight(figure.get_figheight() + 15 / 72 * (-(-len(labels) // columns)))
        figure.legend(handles, labels, loc="outside lower left", ncols=columns, handlelength=3.2 if lines else 1.0)


def _number(value, _):
    return f"{value:g}"


def _percentage(value, _):
    return f"{100 * value:g}%"


def _whole_numbers(axis):
    axis.set_major_locator(MaxNLocator(integer=True, min_n_ticks=1, nbins=8))
    axis.set_major_formatter(FuncFormatter(_number))


def _logarithmic(axis):
    axis.axes.set(**{f"{axis.axis_name}scale": "log"})
    low, high = axis.get_data_interval()
    # Less than two decades need ticks between the powers of ten.
    axis.set_major_locator(LogLocator(subs=(1, 2, 5) if high < 100 * low else (1,), numticks=8))
    axis.set_major_formatter(FuncFormatter(_number))
    axis.set_minor_formatter(NullFormatter())


def _finished(figure, title):
    stream = io.BytesIO()
    with warnings.catch_warnings():
        # Labels may be in any script: the reader's browser has the glyphs that matplotlib's font lacks.
        warnings.filterwarnings("ignore", "Glyph .* missing from", UserWarning)
        figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None, "Format": None, "Type": None})
    drawing = ElementTree.fromstring(stream.getvalue())
    for element in list(drawing.iter()):
        element.tag = element.tag.rpartition("}")[2]
        element.attrib = {name.rpartition("}")[2]: value for name, value in element.attrib.items()}
        if "font:" in element.get("style", ""):
            size = element.get("style").split("font:")[1].split("px")[0].strip()
            rest = [part for part in element.get("style").split(";") if "font:" not in part]
            element.set("style", ";".join([f"font-size: {size}px", *rest]))
    for metadata in drawing.findall("metadata"):
        drawing.remove(metadata)
    for name in ("width", "height", "version"):
        drawing.attrib.pop(name, None)
    drawing.set("role", "img")
    return Chart(title, drawing)
