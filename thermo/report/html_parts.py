"""Pieces of the HTML report: everything that comes from a user is escaped here, once."""

from __future__ import annotations

import base64
import html
import io
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any


@dataclass(frozen=True)
class Cell:
    """A table's cell: its text, whether it is a number, and a class of its own."""

    text: str
    number: bool = False
    kind: str = ""


def esc(text: object) -> str:
    """Text for HTML, quotes included."""
    return html.escape(str(text), quote=True)


def paragraph(text: str, kind: str = "") -> str:
    """A paragraph of plain text."""
    return f"<p{_class(kind)}>{esc(text)}</p>"


def section(title: str, *parts: str, level: int = 2) -> str:
    """A heading and what follows; "" where nothing does."""
    inside = "\n".join(part for part in parts if part)
    return f"<h{level}>{esc(title)}</h{level}>\n{inside}" if inside else ""


def bullets(items: Sequence[str], ordered: bool = False) -> str:
    """A list of plain sentences."""
    if not items:
        return ""
    tag = "ol" if ordered else "ul"
    return f"<{tag}>" + "".join(f"<li>{esc(item)}</li>" for item in items) + f"</{tag}>"


def details(title: str, inside: str) -> str:
    """Something to open; ``inside`` is HTML."""
    return f"<details><summary>{esc(title)}</summary>\n{inside}\n</details>" if inside else ""


def table(
    caption: str,
    heads: Sequence[Cell],
    rows: Sequence[Sequence[Cell]],
    kinds: Sequence[str] = (),
    stack: bool = True,
) -> str:
    """A table whose first cell of each row is its head.

    ``kinds``: a class for each row. ``stack``: on a narrow screen each row becomes a block; else
    the table scrolls within its frame.
    """
    if not rows:
        return ""
    head = "".join(f'<th scope="col"{_class("n" * h.number)}>{esc(h.text)}</th>' for h in heads)
    body = []
    for k, row in enumerate(rows):
        kind = kinds[k] if kinds else ""
        cells = [f'<th scope="row">{esc(row[0].text)}</th>']
        for h, cell in zip(heads[1:], row[1:], strict=True):
            css = " ".join(part for part in ("n" if cell.number else "", cell.kind) if part)
            cells.append(f'<td{_class(css)} data-head="{esc(h.text)}">{esc(cell.text)}</td>')
        body.append(f"<tr{_class(kind)}>{''.join(cells)}</tr>")
    words = f"<caption>{esc(caption)}</caption>" if caption else ""
    made = (
        f"<table{_class('stack' if stack else '')}>{words}<thead><tr>{head}</tr></thead>"
        f"<tbody>{''.join(body)}</tbody></table>"
    )
    if stack:
        return made
    return (
        f'<div class="scroll" tabindex="0" role="region" aria-label="{esc(caption)}">{made}</div>'
    )


def picture(figure: Any, alt: str, caption: str = "") -> str:
    """A matplotlib figure as an SVG inside the page."""
    stream = io.BytesIO()
    figure.savefig(stream, format="svg", metadata={"Date": None, "Creator": None})
    data = base64.b64encode(stream.getvalue()).decode("ascii")
    words = f"<figcaption>{esc(caption)}</figcaption>" if caption else ""
    return f'<figure><img src="data:image/svg+xml;base64,{data}" alt="{esc(alt)}">{words}</figure>'


def _class(kind: str) -> str:
    return f' class="{kind}"' if kind else ""
