"""A report as one HTML file that needs nothing from elsewhere: text, tables, pictures; all text is escaped."""

from __future__ import annotations

import base64
import io
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from html import escape
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from matplotlib.figure import Figure

_STYLE = """
:root { color-scheme: light; }
body { font: 1rem/1.5 system-ui, sans-serif; color: #111; background: #fff; margin: 0 auto; padding: 1rem;
  max-width: 62rem; overflow-wrap: anywhere; }
h1 { font-size: 1.6rem; line-height: 1.2; margin: .5rem 0; }
h2 { font-size: 1.25rem; margin: 2rem 0 .5rem; border-bottom: 1px solid #888; }
nav ul { padding-left: 1.2rem; columns: 2 14rem; }
figure { margin: 1rem 0; break-inside: avoid; }
figure img { width: 100%; height: auto; }
figcaption { font-weight: 600; }
.wide { overflow-x: auto; }
table { border-collapse: collapse; margin: .25rem 0 .75rem; font-variant-numeric: tabular-nums; overflow-wrap: normal; }
.title { font-weight: 600; margin: .75rem 0 0; }
th, td { border: 1px solid #999; padding: .2rem .5rem; text-align: left; vertical-align: top; }
th { background: #eee; }
td.n { text-align: right; white-space: nowrap; }
td.t { white-space: nowrap; }
td.l { min-width: 16rem; }
@media print { body { max-width: none; padding: 0; font-size: 10pt; } nav { display: none; }
  h2 { break-after: avoid; } tr { break-inside: avoid; } thead { display: table-header-group; }
  .wide { overflow: visible; } th { background: none; } td.l { min-width: 0; } td.t { white-space: normal; } }
"""

_LARGEST_SVG = 400_000  # bytes; a larger figure is shown as pixels


@dataclass(frozen=True, slots=True)
class Picture:
    """A figure with its title and a text that says what it shows."""

    title: str
    figure: Figure
    text: str  # alternative for those who do not see it


@dataclass(frozen=True, slots=True)
class Grid:
    """A table of texts; a column whose cells all read as numbers is set to the right."""

    title: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]


@dataclass(frozen=True, slots=True)
class Section:
    """A heading with paragraphs and then tables and pictures."""

    title: str
    paragraphs: tuple[str, ...] = ()
    parts: tuple[Picture | Grid, ...] = ()


def render(title: str, lead: Sequence[str], sections: Sequence[Section]) -> str:
    """Give the whole page.

    Parameters
    ----------
    title : str
        Of the page.
    lead : sequence of str
        Paragraphs before the first heading.
    sections : sequence of Section
        In order.

    Returns
    -------
    page : str
        HTML that makes no request.
    """
    entries = "".join(f'<li><a href="#s{i}">{escape(s.title)}</a></li>' for i, s in enumerate(sections))
    body = "".join(_section(section, f"s{i}") for i, section in enumerate(sections))
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        '<meta http-equiv="Content-Security-Policy" content="default-src \'none\'; img-src data:; '
        "style-src 'unsafe-inline'\">\n"
        f"<title>{escape(title)}</title>\n<style>{_STYLE}</style>\n</head>\n<body>\n<main>\n"
        f"<h1>{escape(title)}</h1>\n{_paragraphs(lead)}"
        f'<nav aria-label="Contents"><ul>{entries}</ul></nav>\n{body}</main>\n</body>\n</html>\n'
    )


def _paragraphs(texts: Sequence[str]) -> str:
    return "".join(f"<p>{escape(text)}</p>\n" for text in texts)


def _section(section: Section, name: str) -> str:
    parts = "".join(_picture(p) if isinstance(p, Picture) else _grid(p) for p in section.parts)
    head = f'<section id="{name}">\n<h2>{escape(section.title)}</h2>\n'
    return f"{head}{_paragraphs(section.paragraphs)}{parts}</section>\n"


def _grid(grid: Grid) -> str:
    if not grid.rows:
        return f"<p>{escape(grid.title)}: none.</p>\n"
    heads = "".join(f'<th scope="col">{escape(head)}</th>' for head in grid.heads)
    kinds = [_kind(column) for column in zip(*grid.rows, strict=True)]
    rows = "".join(f"<tr>{''.join(map(_cell, row, kinds))}</tr>\n" for row in grid.rows)
    name = escape(grid.title)
    return (
        f'<p class="title">{name}</p>\n<div class="wide"><table aria-label="{name}">\n<thead><tr>{heads}</tr></thead>\n'
        f"<tbody>\n{rows}</tbody></table></div>\n"
    )


def _kind(column: Sequence[str]) -> str:
    """Class of a column's cells: numbers, long texts, others."""
    filled = [text.strip().lstrip("+-> ") for text in column if text.strip()]
    if filled and all(text[0].isdigit() and len(text) < 24 for text in filled):
        return "n"
    return "l" if any(len(text) > 40 for text in column) else "t"


def _cell(text: str, kind: str) -> str:
    return f'<td class="{kind}">{escape(text)}</td>'


def _picture(picture: Picture) -> str:
    with _laid_out(picture.figure):
        image, kind = svg_of(picture.figure), "svg+xml"
        if len(image) > _LARGEST_SVG:
            image, kind = _png_of(picture.figure), "png"
    data = base64.b64encode(image).decode()
    return (
        f"<figure><figcaption>{escape(picture.title)}</figcaption>\n"
        f'<img alt="{escape(picture.text)}" src="data:image/{kind};base64,{data}"></figure>\n'
    )


@contextmanager
def _laid_out(figure: Figure) -> Iterator[None]:
    """Lay a figure out once; matplotlib would draw it twice for each file, once only to find its layout."""
    engine = figure.get_layout_engine()
    if engine is None:
        yield
        return
    dpi = figure.get_dpi()
    figure.set_dpi(72)  # that of SVG files
    try:
        engine.execute(figure)
        figure.set_layout_engine(None)
        yield
    finally:
        figure.set_dpi(dpi)
        figure.set_layout_engine(engine)


def _png_of(figure: Figure) -> bytes:
    """Pixels instead of lines, for figures of very many parts."""
    stream = io.BytesIO()
    figure.savefig(stream, format="png", dpi=150, metadata={"Software": None})
    return stream.getvalue()


def svg_of(figure: Figure) -> bytes:
    """Give a figure as SVG, the same bytes for the same figure.

    Parameters
    ----------
    figure : Figure
        Of matplotlib.

    Returns
    -------
    svg : bytes
        A document of its own.
    """
    import matplotlib

    stream = io.BytesIO()
    with matplotlib.rc_context({"svg.hashsalt": "fallrise"}):
        figure.savefig(stream, format="svg", metadata={"Date": None})
    return stream.getvalue()
