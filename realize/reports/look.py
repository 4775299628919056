"""How text is laid out for a stream: width, colour or not, which signs it can carry."""

from __future__ import annotations

import io
import os
from dataclasses import dataclass
from typing import Any

from realize.reports.numbers import clean

#: Narrowest and widest page: below, columns fold; above, lines are hard to follow.
NARROWEST, WIDEST = 40, 110
#: A text from a file is cut in the middle beyond this many signs.
LONGEST = 2000
_PLAIN_SIGNS = str.maketrans({"→": "->", "±": "+-", "…": "~", "×": "x", "µ": "u", "─": "-", "━": "=", "│": "|"})


@dataclass(frozen=True)
class Page:
    """Width in columns, whether styles may be used, whether only ASCII may be used."""

    width: int = 80
    styled: bool = False
    ascii_only: bool = False


PLAIN = Page()


def page_for(stream: Any) -> Page:
    """Return the page of a text stream: styled and as wide as the terminal when it is one, plain 80 columns otherwise.

    ``NO_COLOR`` and ``TERM=dumb`` switch styles off, as is the custom.
    """
    encoding = (getattr(stream, "encoding", None) or "ascii").lower().replace("_", "-")
    ascii_only = not encoding.startswith("utf")
    try:
        terminal = bool(stream.isatty())
        width = os.get_terminal_size(stream.fileno()).columns if terminal else 80
    except (AttributeError, OSError, ValueError):
        terminal, width = False, 80
    styled = terminal and not os.environ.get("NO_COLOR") and os.environ.get("TERM") != "dumb"
    return Page(max(NARROWEST, min(width or 80, WIDEST)), styled, ascii_only)


def laid_out(parts: list[Any], page: Page) -> str:
    """Return rich renderables as text that ends with a line feed; no line is wider than the page."""
    from rich.console import Console

    target = io.StringIO()
    console = Console(
        file=target,
        width=page.width,
        force_terminal=page.styled,
        color_system="standard" if page.styled else None,
        no_color=not page.styled,
        highlight=False,
        markup=False,
        emoji=False,
        soft_wrap=False,
        legacy_windows=False,
        force_jupyter=False,
        force_interactive=False,
        _environ={},
    )
    for part in parts:
        console.print(part)
    lines = [line.rstrip() for line in target.getvalue().split("\n")]
    text = "\n".join(lines).rstrip("\n") + "\n"
    if page.ascii_only:
        text = text.translate(_PLAIN_SIGNS).encode("ascii", "replace").decode("ascii")
    return text


def grid(columns: list[tuple[str, str]], rows: list[list[Any]], *, heading: bool = True) -> Any:
    """Return a table with a rule under its heading.

    Parameters
    ----------
    columns : list of (heading, "left" or "right")
    rows : list of list of str or rich Text
    """
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, show_header=heading, pad_edge=False, padding=(0, 2, 0, 0), collapse_padding=True)
    for k, (name, side) in enumerate(columns):
        # names and numbers stay whole as long as the page allows; the last column gives way first
        table.add_column(
            Text(name),
            justify="right" if side == "right" else "left",
            header_style="bold underline",
            overflow="fold",
            no_wrap=False,
            min_width=min(len(name), 6) if k else None,
        )
    for row in rows:
        table.add_row(*[cell if isinstance(cell, Text) else words(cell) for cell in row])
    return table


def facts(rows: list[tuple[str, Any]]) -> Any:
    """Return lines of ``name   value``, long values folded under themselves."""
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 2, 0, 0))
    table.add_column(style="bold", no_wrap=True, min_width=16)
    table.add_column(overflow="fold")
    for name, value in rows:
        table.add_row(words(name), value if isinstance(value, Text) else words(value))
    return table


def words(text: Any, style: str = "") -> Any:
    """Return text on one line, without control characters, styled where the page allows; the page folds it."""
    from rich.text import Text

    return Text(clean(text, LONGEST), style=style, overflow="fold")


def bullets(lines: list[str], style: str = "yellow") -> Any:
    """Return one line for each text with a mark in front, folded under itself."""
    from rich.table import Table

    table = Table(box=None, show_header=False, pad_edge=False, padding=(0, 1, 0, 0))
    table.add_column(no_wrap=True, style=style)
    table.add_column(overflow="fold")
    for line in lines:
        table.add_row(words("!"), words(line))
    return table
