"""A report as one HTML file that needs nothing else: no script, no font, no picture from elsewhere.

A `Page` is filled from top to bottom and written once. Every text is escaped here and nowhere else, for labels
and names come from users' data; only the markup of a `charts.Chart` goes in as it is.
"""

import base64
import html
import io
import math
import numbers
import unicodedata

import numpy as np
from PIL import Image

from hyperforecast.storage import write_atomically

_STYLE = """
:root { color-scheme: light; --ink: #1c1b19; --soft: #5d5952; --rule: #c9c3b8; --accent: #8a3b12; }
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 72rem; padding: 1rem 1rem 3rem; background: #fff; color: var(--ink);
  font: 1rem/1.5 system-ui, "Segoe UI", "Noto Sans", "DejaVu Sans", sans-serif; overflow-wrap: anywhere; }
header { border-bottom: 4px double var(--ink); margin-bottom: 1.5rem; }
h1 { font-size: 1.7rem; line-height: 1.2; margin: .5rem 0; }
h2 { font-size: 1.25rem; margin: 2.2rem 0 .6rem; border-bottom: 1px solid var(--rule); }
p { max-width: 44rem; margin: .6rem 0; }
.lead { font-size: 1.1rem; }
nav ol { margin: .4rem 0 1rem; padding-left: 1.4rem; columns: 16rem; }
a { color: var(--accent); }
figure { margin: 1.2rem 0; break-inside: avoid; }
figcaption, caption { color: var(--soft); font-size: .9rem; text-align: left; }
figcaption { max-width: 44rem; margin-top: .4rem; }
caption { padding: .3rem 0; }
.panels { display: grid; gap: 1rem 2rem; grid-template-columns: repeat(auto-fit, minmax(min(100%, 21rem), 1fr)); }
.panel { min-width: 0; max-width: 30rem; break-inside: avoid; }
.panel h3, .panel caption { color: var(--ink); font-size: .95rem; font-weight: 600; margin: 0 0 .2rem; }
.panel svg { display: block; width: 100%; height: auto; font-family: inherit; }
.scroll { overflow-x: auto; max-width: 100%; }
table { border-collapse: collapse; font-size: .9rem; font-variant-numeric: tabular-nums; }
th, td { padding: .25rem .6rem; border-bottom: 1px solid var(--rule); text-align: left; vertical-align: top;
  overflow-wrap: normal; }
thead th { border-bottom: 2px solid var(--ink); vertical-align: bottom; }
tbody th { font-weight: 500; overflow-wrap: anywhere; }
tbody th:not(.number) { min-width: 8rem; }
@media screen { table:not(.heat) td:not(.number) { min-width: 6.5rem; } }
.number { text-align: right; white-space: nowrap; }
.heat { width: 100%; }
.heat td { padding: .2rem .3rem; text-align: right; border: 1px solid #fff; print-color-adjust: exact;
  -webkit-print-color-adjust: exact; }
dl { display: grid; grid-template-columns: fit-content(45%) minmax(0, 1fr); gap: .2rem 1.2rem; max-width: 44rem; }
dt { color: var(--soft); } dd { margin: 0; }
ul { max-width: 44rem; margin: .6rem 0; padding-left: 1.2rem; }
.pictures { display: grid; gap: .8rem 1.2rem; grid-template-columns: repeat(auto-fill, minmax(10rem, 1fr)); margin: 0;
  padding: 0; list-style: none; }
.pictures li { break-inside: avoid; }
.pictures img { display: block; width: 100%; max-width: 20rem; height: auto; }
.pictures span { font-size: .9rem; }
@media (min-width: 60rem) { .pictures { grid-template-columns: repeat(auto-fill, minmax(15rem, 1fr)); } }
@media print, (min-width: 60rem) {
  .sheet main { display: grid; grid-template-columns: minmax(0, 1fr) minmax(0, 1fr); column-gap: 2rem; }
  .sheet section:nth-of-type(n+3), .sheet main > p { grid-column: 1 / -1; } }
footer { margin-top: 3rem; border-top: 1px solid var(--rule); color: var(--soft); font-size: .85rem; }
@page { size: A4; margin: 10mm; }
@media print { :root { font-size: 10pt; } body { max-width: none; padding: 0; } nav { display: none; }
  h2 { break-after: avoid; } .scroll { overflow: visible; } tr { break-inside: avoid; } a { color: inherit; }
  caption, thead, tbody tr:first-child { break-after: avoid; } tbody tr:last-child { break-before: avoid; }
  table { font-size: .8rem; } th, td { padding: .2rem .35rem; } .panels { grid-template-columns: 1fr 1fr; }
  footer { margin-top: 1rem; }
  .sheet { font-size: .84rem; line-height: 1.25; } .sheet header { margin-bottom: .5rem; }
  .sheet h1 { font-size: 1.4rem; margin: 0; } .sheet h2 { font-size: 1rem; margin: .6rem 0 .2rem; }
  .sheet p, .sheet ul, .sheet dl, .sheet figure, .sheet .lead { margin: .3rem 0; max-width: none; font-size: inherit; }
  .sheet dl { gap: .05rem 1rem; } .sheet footer { display: none; } .sheet .panels { gap: .3rem 1.5rem; }
  .sheet td, .sheet th { padding: .08rem .4rem; }
  .sheet figcaption, .sheet caption { max-width: none; font-size: inherit; } }
"""

# What a page may do in a browser: show its own styles and pictures, nothing else.
_POLICY = "default-src 'none'; style-src 'unsafe-inline'; img-src data:"


def plain(text):
    """Return `text` as one line of printable characters."""
    words = "".join(" " if unicodedata.category(sign)[0] in "CZ" else sign for sign in str(text)).split()
    return " ".join(words)


def shown(value):
    """Return how a report shows a value: numbers in three digits, nothing as a dash, texts as they are."""
    if value is None:
        return "–"
    if isinstance(value, numbers.Real) and not isinstance(value, (bool, numbers.Integral)):
        if not math.isfinite(value):
            return "–"
        return f"{value:.3f}" if 0.0995 <= abs(value) < 10 else f"{value:.3g}"
    return plain(value)


def _escaped(value):
    return html.escape(shown(value))


class Page:
    """A report in the making.

    Parameters
    ----------
    title : str
    lead : str
        What the report says, in a sentence or two.
    one_sheet : bool
        Whether it is set closely, to print on one sheet of A4.
    """

    def __init__(self, title, lead, *, one_sheet=False):
        self._one_sheet = one_sheet
        self._title = _escaped(title)
        self._lead = _escaped(lead)
        self._sections = []
        self._parts = []
        self._n_charts = 0

    def section(self, heading):
        """Begin a section."""
        self._sections.append(_escaped(heading))
        number = len(self._sections)
        end = "</section>\n" if number > 1 else ""
        self._parts.append(f'{end}<section id="section-{number}">\n<h2>{_escaped(heading)}</h2>')

    def paragraph(self, text):
        """Add a paragraph."""
        self._parts.append(f"<p>{_escaped(text)}</p>")

    def items(self, texts):
        """Add a list of short texts; nothing if there are none."""
        rows = "".join(f"<li>{_escaped(text)}</li>\n" for text in texts)
        if rows:
            self._parts.append(f"<ul>\n{rows}</ul>")

    def facts(self, facts):
        """Add a list of named facts, a mapping of texts to values."""
        rows = "".join(f"<dt>{_escaped(name)}</dt><dd>{_escaped(value)}</dd>\n" for name, value in facts.items())
        self._parts.append(f"<dl>\n{rows}</dl>")

    def table(self, columns, rows, *, caption):
        """Add a table; the first value of each row names it, and numbers stand to the right.

        Parameters
        ----------
        columns : sequence of str
        rows : iterable of sequences of str, numbers or None
        caption : str
        """
        rows = [list(row) for row in rows]
        numeric = [any(isinstance(row[at], numbers.Number) for row in rows) for at in range(len(columns))]
        classes = [' class="number"' if number else "" for number in numeric]
        head = "".join(f'<th scope="col"{kind}>{_escaped(name)}</th>' for kind, name in zip(classes, columns))
        body = ""
        for row in rows:
            cells = [f"<td{kind}>{_escaped(value)}</td>" for kind, value in zip(classes[1:], row[1:], strict=True)]
            body += f'<tr><th scope="row"{classes[0]}>{_escaped(row[0])}</th>{"".join(cells)}</tr>\n'
        self._parts.append(
            f'<div class="scroll" tabindex="0"><table><caption>{_escaped(caption)}</caption>\n'
            f"<thead><tr>{head}</tr></thead>\n<tbody>\n{body}</tbody></table></div>"
        )

    def heat_tables(self, tables, *, rows, columns, caption):
        """Add tables of shares, side by side where there is room; the larger a share, the darker its cell.

        Parameters
        ----------
        tables : mapping of str to array of shape (rows, columns)
            Shares in [0, 1], shown as percentages; NaN leaves a cell empty.
        rows, columns : sequence of str
            Their labels, the same for every table.
        caption : str
        """
        head = "".join(f'<th scope="col" class="number">{_escaped(name)}</th>' for name in columns)
        panels = ""
        for title, shares in tables.items():
            body = ""
            for name, values in zip(rows, np.asarray(shares, dtype=np.float64), strict=True):
                cells = "".join(_heat_cell(value) for value in values)
                body += f'<tr><th scope="row">{_escaped(name)}</th>{cells}</tr>\n'
            panels += (
                f'<div class="panel scroll" tabindex="0"><table class="heat"><caption>{_escaped(title)}</caption>\n'
                f"<thead><tr><td></td>{head}</tr></thead>\n<tbody>\n{body}</tbody></table></div>\n"
            )
        self._figure(f'<div class="panels">\n{panels}</div>', caption)

    def charts(self, *charts, caption):
        """Add charts (`charts.Chart`), side by side where there is room."""
        panels = ""
        for chart in charts:
            self._n_charts += 1
            panels += f'<div class="panel"><h3>{_escaped(chart.title)}</h3>\n'
            panels += f'{chart.markup(f"chart{self._n_charts}-")}</div>\n'
        self._figure(f'<div class="panels">\n{panels}</div>', caption)

    def pictures(self, strips, *, caption):
        """Add strips of grey pictures with their labels.

        Parameters
        ----------
        strips : iterable of (str, array of shape (n, height, width))
            A label and its pictures, grey levels in [0, 1].
        caption : str
        """
        items = ""
        for label, pictures in strips:
            pictures = np.asarray(pictures)
            strip = np.concatenate(list(pictures), axis=1)
            height, width = strip.shape
            items += (
                f'<li><img src="{_data_uri(strip)}" width="{width}" height="{height}" '
                f'alt="{width // pictures.shape[2]} pictures"> <span>{_escaped(label)}</span></li>\n'
            )
        self._figure(f'<ul class="pictures">\n{items}</ul>', caption)

    def html(self):
        """Return the report as HTML."""
        links = "".join(f'<li><a href="#section-{at}">{name}</a></li>\n' for at, name in enumerate(self._sections, 1))
        long = len(self._sections) > 2 and not self._one_sheet
        contents = f'<nav aria-label="Contents"><ol>\n{links}</ol></nav>\n' if long else ""
        kind = ' class="sheet"' if self._one_sheet else ""
        body = "\n".join(self._parts) + ("\n</section>" if self._sections else "")
        return (
            '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
            f'<meta http-equiv="Content-Security-Policy" content="{_POLICY}">\n'
            '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
            f"<title>{self._title}</title>\n<style>{_STYLE}</style>\n</head>\n<body{kind}>\n"
            f'<header><h1>{self._title}</h1>\n<p class="lead">{self._lead}</p></header>\n'
            f"{contents}<main>\n{body}\n</main>\n<footer><p>Written by hyperforecast.</p></footer>\n</body>\n</html>\n"
        )

    def write(self, path):
        """Write the report to `path` in one rename."""
        write_atomically(path, self.html().encode())

    def _figure(self, content, caption):
        self._parts.append(f"<figure>\n{content}\n<figcaption>{_escaped(caption)}</figcaption></figure>")


def _heat_cell(value):
    if math.isnan(value):
        return "<td></td>"
    # From white to a grey blue that black figures still stand out from.
    red, green, blue = (round(255 - value * depth) for depth in (135, 90, 65))
    return f'<td style="background:rgb({red},{green},{blue})">{100 * value:.0f}</td>'


def _data_uri(picture):
    levels = np.round(255 * np.clip(picture, 0.0, 1.0)).astype(np.uint8)
    stream = io.BytesIO()
    Image.fromarray(levels).save(stream, format="PNG", optimize=True)
    return "data:image/png;base64," + base64.b64encode(stream.getvalue()).decode()
