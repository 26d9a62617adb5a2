"""Pieces of an HTML page: numbers with errors, tables, figures, and the page.

Whatever these functions take as *text* is escaped; what they take as *HTML*
is not, and comes from this package only.
"""

from __future__ import annotations

import html
import math
import re
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import count
from types import ModuleType

from eddyshed.solver.quantities import UNITS

from ..statistics.estimate import Estimate

STYLE = """\
:root { color-scheme: light; }
* { box-sizing: border-box; }
html { -webkit-text-size-adjust: 100%; }
body {
  margin: 0 auto; padding: 2.5rem 1.1rem 4rem; max-width: 38rem;
  background: #fdfdfb; color: #1b1b1b;
  font: 1.06rem/1.55 Charter, "Bitstream Charter", "Sitka Text", Cambria,
    Georgia, "Liberation Serif", serif;
}
h1 { font-size: 1.65rem; line-height: 1.25; font-weight: 600; margin: 0 0 .9rem; }
h2 { font-size: 1.2rem; font-weight: 600; margin: 2.6rem 0 .6rem; }
p { margin: 0 0 .85rem; }
ul { margin: 0 0 .85rem; padding-left: 1.2rem; }
li { margin-bottom: .3rem; }
.caution { border-left: 3px solid #8a8a84; padding-left: .9rem; font-style: italic; }
dl { margin: 0 0 .85rem; }
dt { font-weight: 600; }
dd { margin: 0 0 .45rem 1.2rem; }
figure { margin: 1.8rem 0; }
figure img { display: block; width: 100%; height: auto; }
figcaption { font-size: .88rem; line-height: 1.42; color: #333; }
img + figcaption, p + figcaption { margin-top: .5rem; }
figcaption + .scroll { margin-top: .55rem; }
sup { font-size: .72em; line-height: 0; }
.number { font-weight: 600; }
.scroll { overflow-x: auto; }
table {
  border-collapse: collapse; min-width: 100%; font-size: .88rem; line-height: 1.35;
  border-bottom: 1.5px solid #1b1b1b; font-variant-numeric: lining-nums tabular-nums;
}
thead th { border-top: 1.5px solid #1b1b1b; border-bottom: .75px solid #1b1b1b; }
th { font-weight: 600; text-align: left; vertical-align: bottom; }
th, td { padding: .25rem .8rem .25rem 0; }
th:last-child, td:last-child { padding-right: 0; }
td { vertical-align: top; }
tbody th { font-weight: inherit; vertical-align: top; }
.figures { text-align: right; }
td.figures, table code { white-space: nowrap; }
th[scope=rowgroup] { font-style: italic; padding-top: .5rem; }
tbody.group + tbody.group > tr:first-child > * { border-top: .75px solid #bdbdb6; }
td.words { padding-bottom: .6rem; color: #333; min-width: 17rem; }
.words p { margin: 0 0 .2rem; max-width: calc(100vw - 2.4rem); }
code, pre { font: .8em/1.45 ui-monospace, "DejaVu Sans Mono", Menlo, monospace; }
pre { overflow-x: auto; border: .75px solid #bdbdb6; padding: .7rem .8rem; }
p code, li code { overflow-wrap: anywhere; }
@media (max-width: 30rem) {
  body { padding-top: 1.4rem; font-size: 1rem; }
  h1 { font-size: 1.4rem; }
}
@media print {
  @page { margin: 20mm 30mm; }
  body { max-width: none; padding: 0; background: none; font-size: 10.5pt; }
  figure, figcaption, tbody.group { break-inside: avoid; }
  .table { break-inside: auto; }
  figure img { width: 88%; max-height: 135mm; object-fit: contain; object-position: 0; }
  h2, dt, .table > figcaption { break-after: avoid; }
  .scroll { overflow: visible; }
  pre { white-space: pre-wrap; }
}
"""

PAGE = """\
<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta name="fingerprint" content="{stamp}">
<meta http-equiv="Content-Security-Policy" \
content="default-src 'none'; img-src data:; style-src 'unsafe-inline'">
<meta name="viewport" content="width=device-width, initial-scale=1">
<meta name="generator" content="{generator}">
<title>{title}</title>
<style>
{style}</style>
</head>
<body>
<main>
{body}
</main>
</body>
</html>
"""

NO_PICTURE = (
    '<p>No picture here: <code>pip install "eddyshed[figures]"</code> and the same '
    "command again draw it.</p>"
)


def text(value: object) -> str:
    """Text as HTML: whatever it holds, it is shown and not interpreted.

    Sentences that also go to a terminal have ``+-`` for the sign that it may lack.
    """
    return html.escape(str(value), quote=True).replace(" +- ", " ± ")


def unbroken(value: object) -> str:
    """The same, kept on one line."""
    return text(value).replace(" ", "&nbsp;")


def number(value: float | None, error: float | None, *, scale: float = 1.0) -> str:
    """A number with its standard error, as HTML.

    Parameters
    ----------
    value, error : float or None
        An error of None or infinity is said to be unknown.
    scale : float
        What both are divided by.

    Returns
    -------
    str
        Such as ``0.291 ± 0.026`` or ``(4.1 ± 0.3) × 10<sup>−6</sup>``.
    """
    if value is None or not math.isfinite(value):
        return "unknown"
    if error is None or not math.isfinite(error):
        return f"{_signed(f'{value / scale:.3g}')} (error unknown)"
    if error == 0:
        return _signed(f"{value / scale:.4g}")
    return _signed(format(Estimate(value / scale, error / scale)).replace("+-", "±"))


def _signed(plain: str) -> str:
    """Powers of ten and minus signs as in print."""
    plain = re.sub(
        r"e([+-])0*(\d+)",
        lambda m: f" × 10<sup>{'−' if m[1] == '-' else ''}{m[2]}</sup>",
        plain,
    )
    return plain.replace("-", "−")


def unit(si: str) -> str:
    """A unit such as ``m2 s-2``, with its powers raised, as HTML."""
    raised = re.sub(
        r"(?<=[A-Za-z])(-?)(\d+)",
        lambda m: f"<sup>{'−' if m[1] else ''}{m[2]}</sup>",
        text(si),
    )
    return raised.replace(" ", "&nbsp;")


def span(seconds: float) -> str:
    """A length of time to three figures, in years, days, hours, minutes or seconds."""
    for symbol in ("yr", "d", "h", "min", "s"):
        size = float(UNITS[symbol][0])
        if seconds >= (3 if symbol == "yr" else 1) * size or symbol == "s":
            break
    return f"{float(f'{seconds / size:.3g}'):g}&nbsp;{symbol}"


def listed(items: Sequence[str]) -> str:
    """Words in a row: ``a, b and c``."""
    if len(items) < 2:
        return "".join(items)
    return f"{', '.join(items[:-1])} and {items[-1]}"


def sentence(words: str) -> str:
    """Begin with a capital and end with a full stop."""
    return f"{words[:1].upper()}{words[1:].rstrip('.')}."


def paragraphs(*parts: str) -> str:
    """Paragraphs of HTML."""
    return "\n".join(f"<p>{part}</p>" for part in parts)


def section(title: str, *parts: str) -> str:
    """A section of the page."""
    return "\n".join([f"<section>\n<h2>{text(title)}</h2>", *parts, "</section>"])


@dataclass(slots=True, kw_only=True)
class Note:
    """A note under way: it numbers its tables and figures.

    Attributes
    ----------
    drawing : module or None
        The module of figures; None if nothing can be drawn.
    tables, figures : int
        How many there are so far.
    """

    drawing: ModuleType | None
    tables: int = 0
    figures: int = 0

    def figure(
        self,
        draw: Callable[[ModuleType], str],
        *,
        alt: str,
        caption: str,
        numbers: str = "",
    ) -> str:
        """Draw a figure, or say how it would be drawn.

        Parameters
        ----------
        draw : callable
            Takes the module of figures and returns a data URI.
        alt : str
            What is to be seen, as text.
        caption : str
            HTML.
        numbers : str
            HTML of one line with what is to be seen, shown if nothing is drawn.

        Returns
        -------
        str
            HTML.
        """
        self.figures += 1
        picture = NO_PICTURE + numbers
        if self.drawing is not None:
            picture = f'<img alt="{text(alt)}" src="{draw(self.drawing)}">'
        return (
            f"<figure>\n{picture}\n<figcaption>"
            f'<span class="number">Figure {self.figures}.</span> {caption}'
            "</figcaption>\n</figure>"
        )

    def table(
        self,
        heading: Sequence[str],
        groups: Sequence[Sequence[Sequence[str] | str]],
        *,
        caption: str,
        words: Sequence[int] = (0,),
    ) -> str:
        """A table in a box that scrolls sideways where the page is narrow.

        Parameters
        ----------
        heading : sequence of str
            HTML of the column heads.
        groups : sequence of sequence of rows
            Rows that belong together; a rule stands between groups. A row is
            a sequence of cells (HTML), or one piece of HTML across all columns:
            the head of its group if it comes first, else words on the row above.
        caption : str
            HTML.
        words : sequence of int
            Columns of words; the others hold figures and are set to the right.

        Returns
        -------
        str
            HTML.
        """
        self.tables += 1

        def cell(tag, column, content, scope=""):
            style = "" if column in words else ' class="figures"'
            return f"<{tag}{scope}{style}>{content}</{tag}>"

        def row(place, cells):
            across = f'colspan="{len(heading)}"'
            if isinstance(cells, str) and place == 0:
                return f'<tr><th scope="rowgroup" {across}>{cells}</th></tr>'
            if isinstance(cells, str):
                return f'<tr><td class="words" {across}>{cells}</td></tr>'
            first = cell("th", 0, cells[0], ' scope="row"')
            rest = (cell("td", k, c) for k, c in enumerate(cells[1:], start=1))
            return f"<tr>{first}{''.join(rest)}</tr>"

        head = "".join(
            cell("th", k, content, ' scope="col"') for k, content in enumerate(heading)
        )
        bodies = "\n".join(
            '<tbody class="group">\n'
            + "\n".join(map(row, count(), group))
            + "\n</tbody>"
            for group in groups
        )
        return (
            '<figure class="table">\n<figcaption><span class="number">Table '
            f'{self.tables}.</span> {caption}</figcaption>\n<div class="scroll" '
            f'role="region" aria-label="Table {self.tables}" tabindex="0">\n<table>\n'
            f"<thead><tr>{head}</tr></thead>\n{bodies}\n</table>\n</div>\n</figure>"
        )


def numbers(heading: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A table of numbers in the place of a picture, as HTML of one line.

    Parameters
    ----------
    heading : sequence of str
        HTML of the column heads.
    rows : sequence of sequence of str
        HTML of the cells; the first of each row is its head.
    """
    head = "".join(f'<th scope="col" class="figures">{cell}</th>' for cell in heading)
    body = "".join(
        f'<tr><th scope="row" class="figures">{first}</th>'
        + "".join(f'<td class="figures">{cell}</td>' for cell in rest)
        + "</tr>"
        for first, *rest in rows
    )
    return (
        '<div class="scroll" role="region" aria-label="what the picture would show" '
        f'tabindex="0"><table><thead><tr>{head}</tr></thead><tbody>{body}</tbody>'
        "</table></div>"
    )


def page(*, title: str, stamp: str, generator: str, body: str) -> str:
    """A whole page.

    Parameters
    ----------
    title, stamp, generator : str
        Text.
    body : str
        HTML.

    Returns
    -------
    str
        HTML that needs nothing beside itself.
    """
    return PAGE.format(
        stamp=text(stamp),
        generator=text(generator),
        title=text(title),
        style=STYLE,
        body=body,
    )
