"""A page made of blocks, and how it reads as Markdown and as a web page that needs nothing else."""

from __future__ import annotations

import html
import re
from collections.abc import Iterable
from dataclasses import dataclass
from textwrap import fill

WIDTH = 79


@dataclass(frozen=True)
class Heading:
    text: str
    level: int = 2


@dataclass(frozen=True)
class Paragraph:
    """Text; **what stands between double asterisks** is strong."""

    text: str


@dataclass(frozen=True)
class Points:
    """A list, numbered or not."""

    items: tuple[str, ...]
    numbered: bool = False


@dataclass(frozen=True)
class Formula:
    text: str


@dataclass(frozen=True)
class Table:
    """Cells are plain text: they mean nothing to Markdown or HTML. Words stand to the left."""

    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    words: tuple[str, ...] = ("name", "what")       # heads of columns of words


Block = Heading | Paragraph | Points | Formula | Table


# --- Markdown

def as_markdown(blocks: Iterable[Block]) -> str:
    """Markdown of at most WIDTH columns, tables aside."""
    return "\n\n".join(_MARKDOWN[type(block)](block) for block in blocks) + "\n"


def _points(block: Points) -> str:
    marks = [f"{k}. " if block.numbered else "* " for k in range(1, len(block.items) + 1)]
    return "\n".join(_wrapped(item, mark, "   "[:2 + block.numbered])
                     for mark, item in zip(marks, block.items))


def _table(block: Table) -> str:
    rules = ["---" if head in block.words else "---:" for head in block.heads]
    rows = [block.heads, rules, *(map(_plain_in_markdown, row) for row in block.rows)]
    return "\n".join(f"| {' | '.join(row)} |" for row in rows)


def _plain_in_markdown(text: str) -> str:
    return html.escape(re.sub(r"([\\`*_\[\]|~])", r"\\\1", _printable(text)), quote=False)


def _printable(text: str) -> str:
    return "".join(letter if letter.isprintable() else " " for letter in text)


def _wrapped(text: str, first: str = "", then: str = "") -> str:
    return fill(text, WIDTH, initial_indent=first, subsequent_indent=then,
                break_long_words=False, break_on_hyphens=False)


_MARKDOWN = {
    Heading: lambda block: f"{'#' * block.level} {block.text}",
    Paragraph: lambda block: _wrapped(block.text),
    Points: _points,
    Formula: lambda block: f"    {block.text}",
    Table: _table,
}


# --- HTML

STYLE = """
body { max-width: 46em; margin: 2em auto; padding: 0 1em; font: 16px/1.5 Georgia, serif;
       color: #1c2a2e; background: #fdfcf9; }
h1, h2 { font-family: "Gill Sans", Calibri, sans-serif; line-height: 1.2; color: #12414d; }
h2 { margin-top: 2em; border-bottom: 1px solid #c9d6d3; }
table { border-collapse: collapse; margin: 1em 0; font-size: 0.95em; }
th, td { padding: 0.2em 0.8em; border-bottom: 1px solid #dfe6e3; text-align: right; }
th { border-bottom: 2px solid #12414d; }
.words { text-align: left; }
pre { background: #eef3f1; padding: 0.6em 1em; overflow-x: auto; }
@media print { body { margin: 0; max-width: none; background: none; } }
"""


def as_html(blocks: Iterable[Block], title: str) -> str:
    """A whole page: no script, nothing loaded from elsewhere."""
    body = "\n".join(_HTML[type(block)](block) for block in blocks)
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta name="viewport" content="width=device-width, initial-scale=1">\n'
        f"<title>{html.escape(title)}</title>\n<style>{STYLE}</style>\n</head>\n"
        f"<body>\n{body}\n</body>\n</html>\n"
    )


def _inline(text: str) -> str:
    return re.sub(r"\*\*(.+?)\*\*", r"<strong>\1</strong>", html.escape(text, quote=False))


def _html_points(block: Points) -> str:
    tag = "ol" if block.numbered else "ul"
    items = "\n".join(f"<li>{_inline(item)}</li>" for item in block.items)
    return f"<{tag}>\n{items}\n</{tag}>"


def _html_table(block: Table) -> str:
    kinds = [' class="words"' if head in block.words else "" for head in block.heads]
    heads = "".join(f'<th scope="col"{kind}>{html.escape(head)}</th>'
                    for head, kind in zip(block.heads, kinds))
    rows = "\n".join(
        "<tr>" + "".join(f"<td{kind}>{html.escape(_printable(cell))}</td>"
                         for cell, kind in zip(row, kinds)) + "</tr>"
        for row in block.rows
    )
    return f"<table>\n<thead><tr>{heads}</tr></thead>\n<tbody>\n{rows}\n</tbody>\n</table>"


_HTML = {
    Heading: lambda block: f"<h{block.level}>{_inline(block.text)}</h{block.level}>",
    Paragraph: lambda block: f"<p>{_inline(block.text)}</p>",
    Points: _html_points,
    Formula: lambda block: f"<pre>{html.escape(block.text)}</pre>",
    Table: _html_table,
}
