"""Paragraphs and tables, padded by the width that a terminal shows."""

import textwrap
import unicodedata
from collections.abc import Iterable, Sequence

from oakum.report.terminal import safe

LINE_WIDTH = 79
FILES_SHOWN = 40

Section = Sequence[str]


def paragraph(text: str, bullet: str = "") -> list[str]:
    """`text` wrapped into lines; words, and with them paths without blanks, are never broken.

    Nor is a number from its percent sign. A `bullet` stands before the first line, and blanks under it.
    """
    lines = textwrap.wrap(
        text.replace(" %", "\N{NO-BREAK SPACE}%"),
        LINE_WIDTH,
        initial_indent=bullet,
        subsequent_indent=" " * len(bullet),
        break_long_words=False,
        break_on_hyphens=False,
    )
    return [line.replace("\N{NO-BREAK SPACE}%", " %") for line in lines]


def notes(texts: Iterable[str]) -> list[list[str]]:
    """A paragraph for each of a result's notes."""
    return [paragraph(f"Note: {safe(text)}.") for text in texts]


def table(head: Sequence[str], rows: Sequence[Sequence[str]], *, left: Sequence[int] = ()) -> list[str]:
    """Lines of a table: `head` over a rule over `rows`, indented by two, columns right-aligned.

    The columns whose index is in `left` are left-aligned instead. Cells must be `safe` already.
    """
    columns = list(zip(head, *rows, strict=True))
    widths = [max(map(width, column)) for column in columns]

    def line(cells: Sequence[str]) -> str:
        padded = [
            cell + " " * (widths[i] - width(cell)) if i in left else " " * (widths[i] - width(cell)) + cell
            for i, cell in enumerate(cells)
        ]
        return ("  " + "  ".join(padded)).rstrip()

    return [line(head), "  " + "  ".join("-" * w for w in widths), *map(line, rows)]


def pairs(rows: Sequence[tuple[str, str]]) -> list[str]:
    """Lines of `name   value`, the values in one column."""
    name_width = max((width(name) for name, _ in rows), default=0)
    return [f"  {name}{' ' * (name_width - width(name))}  {value}".rstrip() for name, value in rows]


def width(text: str) -> int:
    """Terminal cells that `text` takes: two for wide East Asian characters, none for combining ones."""
    if text.isascii():
        return len(text)
    cells = 0
    for character in text:
        if unicodedata.east_asian_width(character) in "WF":
            cells += 2
        elif not unicodedata.combining(character):
            cells += 1
    return cells


def and_more(count: int) -> list[str]:
    """The line under a table that was cut, if it was."""
    return [f"  and {count:,} more; --json lists them all"] if count > 0 else []


def joined(sections: Iterable[Section]) -> str:
    """The sections that hold anything, an empty line between them."""
    return "\n\n".join("\n".join(section) for section in sections if section) + "\n"
