"""Pieces of self-contained HTML pages: nothing in them is loaded from anywhere."""

from __future__ import annotations

import base64
from collections.abc import Iterable, Sequence
from html import escape

from rich.console import Console, RenderableType
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

STYLE = """
:root { color-scheme: light; }
* { box-sizing: border-box; }
body { margin: 0 auto; max-width: 76rem; padding: 1rem 1.25rem 3rem; color: #1a1a1a;
       background: #fff; font: 16px/1.5 system-ui, sans-serif; }
h1 { font-size: 1.6rem; margin: .5rem 0 .25rem; } h2 { font-size: 1.2rem; margin: 2rem 0 .5rem; }
h2 { border-top: 1px solid #bbb; padding-top: 1rem; }
p { max-width: 60rem; } .lead { font-size: 1.1rem; }
nav { margin: .5rem 0; } nav a { margin-right: 1rem; white-space: nowrap; } a { color: #005a8c; }
figure { margin: .75rem 0; overflow-x: auto; } figcaption { color: #444; font-size: .9rem; }
img { max-width: 100%; min-width: 46rem; height: auto; display: block; }
.wide { overflow-x: auto; } .tall { max-height: 32rem; overflow: auto; }
table { border-collapse: collapse; font-size: .92rem; margin: .25rem 0; }
caption { text-align: left; font-weight: 600; padding: .5rem 0 .25rem; }
th, td { text-align: left; vertical-align: top; padding: .2rem .75rem .2rem 0;
         border-bottom: 1px solid #ddd; white-space: pre-line; }
td:last-child:not(.n) { min-width: 15rem; } details { margin: .5rem 0; }
th { border-bottom: 2px solid #888; } td.n, th.n { text-align: right; white-space: nowrap;
     font-variant-numeric: tabular-nums; }
.cards { display: flex; flex-wrap: wrap; gap: .75rem; margin: 1rem 0; }
.card { border: 1px solid #bbb; border-radius: .4rem; padding: .5rem .9rem; min-width: 9rem; }
.card b { display: block; font-size: 1.35rem; } .card.bad { border: 2px solid #a03000; }
.card.bad b::before { content: "! "; }
.bad, .red { color: #a03000; } .good, .green { color: #00694b; } .yellow { color: #7a5200; }
.bold { font-weight: 600; } .cyan { color: #005a8c; } .dim, .note { color: #555; }
@media print { body { max-width: none; font-size: 11px; } .tall { max-height: none; }
               img { min-width: 0; } nav { display: none; }
               figure, tr { break-inside: avoid; } }
"""


def page(title: str, body: Iterable[str]) -> str:
    """Give a whole page."""
    return (
        '<!DOCTYPE html>\n<html lang="en"><head><meta charset="utf-8">'
        '<meta name="viewport" content="width=device-width, initial-scale=1">'
        f"<title>{escape(title)}</title><style>{STYLE}</style></head>\n<body>\n"
        + "\n".join(body)
        + "\n</body></html>\n"
    )


def picture(png: bytes, alt: str, caption: str = "") -> str:
    """Give a PNG with its alternative text and a caption."""
    data = base64.b64encode(png).decode("ascii")
    below = f"<figcaption>{escape(caption)}</figcaption>" if caption else ""
    return (
        f'<figure><img alt="{escape(alt, quote=True)}" src="data:image/png;base64,{data}">'
        f"{below}</figure>"
    )


def table(
    headings: Sequence[str],
    rows: Iterable[Sequence[str]],
    numeric: Iterable[int] = (),
    caption: str = "",
    tall: bool = False,
    ids: Sequence[str] = (),
) -> str:
    """Give a table of plain texts.

    Args:
        headings: Texts of the first row; all empty: none is shown.
        rows: Texts.
        numeric: Columns that are aligned to the right.
        caption: Text above.
        tall: Whether it scrolls in a box of its own when it is long.
        ids: Anchors of the rows.
    """
    numeric = set(numeric)

    def line(cells: Sequence[str], tag: str, anchor: str = "") -> str:
        inside = "".join(
            f"<{tag}{' class=n' if c in numeric else ''}>{escape(cell)}</{tag}>"
            for c, cell in enumerate(cells)
        )
        return f"<tr{f' id={anchor}' if anchor else ''}>{inside}</tr>"

    head = f"<thead>{line(headings, 'th')}</thead>" if any(headings) else ""
    body = "".join(
        line(row, "td", ids[r] if r < len(ids) else "") for r, row in enumerate(rows)
    )
    title = f"<caption>{escape(caption)}</caption>" if caption else ""
    return (
        f'<div class="wide{" tall" if tall else ""}"><table>{title}{head}<tbody>{body}</tbody>'
        "</table></div>"
    )


def card(label: str, figure: str, bad: bool = False) -> str:
    """Give one figure that is to be seen first."""
    return f'<div class="card{" bad" if bad else ""}"><b>{escape(figure)}</b>{escape(label)}</div>'


def of_terminal(part: RenderableType) -> str:
    """Give what is printed in a terminal (a text, a table, padding around them) as HTML."""
    if isinstance(part, Padding):
        return of_terminal(part.renderable)
    if isinstance(part, Text):
        return f"<p>{_styled(part)}</p>"
    if isinstance(part, str):
        return escape(part)
    assert isinstance(part, Table), f"no HTML for a {type(part).__name__}"
    heading = bool(part.show_header) and any(str(column.header) for column in part.columns)
    classes = ["n" if column.justify == "right" else "" for column in part.columns]

    def cell(content: RenderableType, tag: str, name: str) -> str:
        inside = _styled(content) if isinstance(content, Text) else escape(str(content))
        return f"<{tag}{f' class={name}' if name else ''}>{inside}</{tag}>"

    head = "".join(
        cell(column.header, "th", name) for column, name in zip(part.columns, classes, strict=True)
    )
    rows = zip(*(column.cells for column in part.columns), strict=True)
    body = "".join(
        f"<tr>{''.join(cell(c, 'td', n) for c, n in zip(row, classes, strict=True))}</tr>"
        for row in rows
    )
    title = f"<caption>{escape(str(part.title))}</caption>" if part.title else ""
    head = f"<thead><tr>{head}</tr></thead>" if heading else ""
    return f'<div class="wide"><table>{title}{head}<tbody>{body}</tbody></table></div>'


def _styled(text: Text) -> str:
    """Give a text with its styles as classes of :data:`STYLE`."""
    plain = Console(color_system="truecolor", width=10_000)
    text = text.copy()
    text.stylize(text.style)  # a style of the whole is told apart from those of parts
    parts = []
    for segment in text.render(plain):
        style = segment.style
        names = [
            name for name, on in (("bold", style and style.bold), ("dim", style and style.dim))
            if on
        ]  # fmt: skip
        if style and style.color:
            names.append(style.color.name)
        inside = escape(segment.text)
        parts.append(f'<span class="{" ".join(names)}">{inside}</span>' if names else inside)
    return "".join(parts)
