"""Reading the page back, with the standard library only."""

from __future__ import annotations

from html.parser import HTMLParser

import pandas as pd

VOID = {"meta", "img", "line", "circle"}


class Reader(HTMLParser):
    """Collects tags, attributes, text and tables, and checks that tags are closed in order."""

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text = ""
        self.grids: list[list[list[tuple[str, int]]]] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        attributes = dict(attrs)
        self.tags.append((tag, attributes))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self.grids.append([])
        elif tag == "tr":
            self.grids[-1].append([])
        elif tag in ("td", "th"):
            self.grids[-1][-1].append(("", int(attributes.get("rowspan") or 1)))

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if not self.open or self.open[-1] == "style":
            return
        self.text += data
        if self.open[-1] in ("td", "th"):
            before, span = self.grids[-1][-1][-1]
            self.grids[-1][-1][-1] = (before + data, span)

    def all(self, tag: str) -> list[dict[str, str | None]]:
        """Return the attributes of every tag of a name."""
        return [attributes for name, attributes in self.tags if name == tag]

    def tables(self, having: str) -> list[pd.DataFrame]:
        """Return the tables with a column that starts so, all cells text."""
        frames = [_frame(grid) for grid in self.grids]
        return [f for f in frames if any(name.startswith(having) for name in f.columns)]


def _frame(grid: list[list[tuple[str, int]]]) -> pd.DataFrame:
    """Spread cells that span rows, and check that every row is full."""
    columns = [text for text, _ in grid[0]]
    left = [0] * len(columns)
    above = [""] * len(columns)
    rows = []
    for cells in grid[1:]:
        given = iter(cells)
        for place in range(len(columns)):
            if left[place] == 0:
                above[place], left[place] = next(given)
            left[place] -= 1
        assert next(given, None) is None
        rows.append(list(above))
    return pd.DataFrame(rows, columns=columns)
