"""Pages of the guide as text for a terminal."""

from __future__ import annotations

import re
from dataclasses import dataclass
from importlib.resources import files
from textwrap import wrap

WIDEST = 100  # characters a line, on a terminal that has more
_MARKS = re.compile(r"\*\*(.+?)\*\*|`(.+?)`")


@dataclass(frozen=True)
class Page:
    """One page.

    Parameters
    ----------
    topic, title : str
    markdown : str
        As stored, without the title.
    """

    topic: str
    title: str
    markdown: str


def pages() -> dict[str, Page]:
    """All pages of the guide by topic, in the order of the alphabet."""
    found = {}
    for file in sorted(files("volmap_shared").joinpath("guide").iterdir(), key=lambda f: f.name):
        if file.name.endswith(".md"):
            topic = file.name.removesuffix(".md")
            title, _, body = file.read_text(encoding="utf-8").partition("\n")
            found[topic] = Page(topic, title.removeprefix("# ").strip(), body.strip())
    return found


def as_text(page: Page, width: int) -> str:
    """A page for reading: wrapped, tables set out, marks of Markdown taken away."""
    width = max(min(width, WIDEST), 40)
    blocks = [_block(block.splitlines(), width) for block in re.split(r"\n\s*\n", page.markdown)]
    return "\n\n".join([page.title, "=" * len(page.title), *blocks]).replace("\n\n=", "\n=", 1)


def _block(lines: list[str], width: int) -> str:
    if lines[0].startswith("|"):
        return _table(lines, width)
    if lines[0].startswith("* "):
        items = re.split(r"(?:^|\n)\* ", "\n".join(lines))[1:]
        return "\n".join("\n".join(_wrapped(item, width, first="  - ", rest="    ")) for item in items)
    return "\n".join(_wrapped(" ".join(lines), width))


def _plain(text: str) -> str:
    """Text without marks for bold and code."""
    return _MARKS.sub(lambda m: m.group(1) or m.group(2), " ".join(text.split()))


def _wrapped(text: str, width: int, *, first: str = "", rest: str = "") -> list[str]:
    return wrap(
        _plain(text),
        width,
        initial_indent=first,
        subsequent_indent=rest,
        break_long_words=False,
        break_on_hyphens=False,
    )


def _table(lines: list[str], width: int) -> str:
    """Rows of cells side by side; where the terminal is too narrow, cells below each other."""
    rows = [[_plain(cell) for cell in line.strip("|").split("|")] for line in lines]
    head, body = rows[0], rows[2:]  # the second line only divides
    widest = [max(len(row[c]) for row in (head, *body)) for c in range(len(head))]
    given = _widths(widest, width - 2 - 3 * (len(head) - 1))
    longest = [max(len(word) for row in (head, *body) for word in row[c].split()) for c in range(len(head))]
    if any(word > w for word, w in zip(longest, given, strict=True)):
        return "\n\n".join("\n".join(_below(head, row, width)) for row in body)
    return "\n".join([*_row(head, given), "  " + "-+-".join("-" * w for w in given), *_rows(body, given)])


def _below(head: list[str], row: list[str], width: int) -> list[str]:
    """Cells of a row below each other, each with the head of its column."""
    told = (f"{h}: {cell}" for h, cell in zip(head, row, strict=True))
    return [line for cell in told for line in _wrapped(cell, width, rest="    ")]


def _widths(widest: list[int], room: int) -> list[int]:
    """Share the room out: no column gets more than it needs, those that need more get even parts."""
    given, left = [0] * len(widest), set(range(len(widest)))
    while left:
        part = max(room, 0) // len(left)
        small = {c for c in left if widest[c] <= part}
        for c in small or left:
            given[c] = min(widest[c], part)
            room -= given[c]
        left -= small or left
    return given


def _rows(body: list[list[str]], given: list[int]) -> list[str]:
    return [line for row in body for line in _row(row, given)]


def _row(cells: list[str], given: list[int]) -> list[str]:
    columns = [_wrapped(cell, w) or [""] for cell, w in zip(cells, given, strict=True)]
    height = max(map(len, columns))
    lines = []
    for i in range(height):
        parts = [(c[i] if i < len(c) else "").ljust(w) for c, w in zip(columns, given, strict=True)]
        lines.append(("  " + " | ".join(parts)).rstrip())
    return lines
