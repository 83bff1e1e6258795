"""A picture with its numbers: one SVG for the page, one PNG for documents, one CSV for whoever wants to draw
it anew.

The SVG is made to stand inside an HTML page beside others: no prologue, no metadata (it would hold a date and
addresses), and identifiers that begin with the picture's own name, because an HTML page is one name space.
"""

import csv
import io
import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

from matplotlib.figure import Figure

PNG_DPI = 200


@dataclass(frozen=True, slots=True)
class Sheet:
    """Numbers behind a picture: SI values, the unit in the header of each column (``current_A``)."""

    header: tuple[str, ...]
    rows: Sequence[Sequence[float | int | str]]


@dataclass(frozen=True, slots=True)
class Picture:
    """A drawn figure: ``name`` is its file name without ending; ``caption`` says what the reader looks at."""

    name: str
    caption: str
    figure: Figure
    sheet: Sheet


@dataclass(frozen=True, slots=True)
class Pasted:
    """A picture as the template needs it; ``svg`` is safe markup of our own making."""

    name: str
    caption: str
    svg: str


def save(picture: Picture, folder: Path) -> Pasted:
    """Write the picture's PNG and CSV into ``folder`` and return what goes into the page."""
    picture.figure.savefig(folder / f"{picture.name}.png", dpi=PNG_DPI, metadata={"Software": None})
    (folder / f"{picture.name}.csv").write_text(csv_text(picture.sheet), encoding="utf-8", newline="")
    text = io.StringIO()
    picture.figure.savefig(text, format="svg", metadata={"Date": None, "Creator": None})
    return Pasted(picture.name, picture.caption, inline_svg(text.getvalue(), picture.name))


def csv_text(sheet: Sheet) -> str:
    """RFC 4180 text of the numbers; a value that is not known is an empty field."""
    text = io.StringIO()
    writer = csv.writer(text)
    writer.writerow(sheet.header)
    writer.writerows([_field(value) for value in row] for row in sheet.rows)
    return text.getvalue()


def inline_svg(document: str, name: str) -> str:
    """Turn a stand-alone SVG document into an element for an HTML page.

    Args:
        document: as matplotlib writes it.
        name: put before every identifier; letters, digits, ``_`` and ``-``.
    """
    svg = document[document.index("<svg") :]
    svg = re.sub(r"<metadata>.*?</metadata>", "", svg, flags=re.DOTALL)
    svg = re.sub(r"<!--.*?-->", "", svg, flags=re.DOTALL)
    # Inside HTML the parser knows the name spaces; the addresses would only look like links to somewhere.
    svg = re.sub(r'\s+xmlns(:\w+)?="[^"]*"', "", svg)
    svg = svg.replace("xlink:href", "href")
    svg = re.sub(r'\bid="([^"]+)"', rf'id="{name}-\1"', svg)
    svg = re.sub(r'href="#([^"]+)"', rf'href="#{name}-\1"', svg)
    svg = re.sub(r"url\(#([^)]+)\)", rf"url(#{name}-\1)", svg)
    # The size in points would fix the size on the page; the view box alone lets it follow the column.
    head, body = svg.split(">", 1)
    return re.sub(r'\s+(?:width|height)="[^"]*"', "", head) + ">" + body.strip()


def _field(value: float | int | str) -> str:
    if isinstance(value, float):
        return "" if value != value else f"{value:.9g}"
    return str(value)
