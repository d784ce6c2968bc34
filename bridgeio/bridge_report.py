"""The report of a bridge file, as text for a terminal or as one self-contained page with pictures.

One rule: the page holds no script and points nowhere outside itself, and every word on it that came from outside is
made visible and escaped.
"""

from __future__ import annotations

import base64
import html as escapes
import textwrap
from collections.abc import Callable, Iterator, Sequence
from pathlib import Path

import numpy as np

from .bridge_facts import Section, sections
from .fitted_file import load_fitted

__all__ = ["html", "text"]

_WIDTH = 80


def text(path: str | Path) -> list[str]:
    """The report of the bridge file at `path`, lines of at most 80 columns where names allow; outside text is raw.

    FileError where the file is wrong or has no fit.
    """
    lines: list[str] = []
    with np.errstate(all="ignore"):  # of numbers that no fit writes, which are shown as they are
        told = sections(load_fitted(path))
    for section in told:
        lines += ["", section.title.upper(), *_wrapped(section.words)]
        lines += ["", *_aligned(section)] if section.rows and section.words else _aligned(section)
    return lines[1:]


def html(path: str | Path, *, visible: Callable[[str], str]) -> str:
    """The report as an HTML page with pictures; `visible` shows characters that must not reach a page as they are.

    FileError where the file is wrong or has no fit, PicturesMissing without matplotlib.
    """
    from .bridge_pictures import pictures

    def plain(words: str) -> str:
        return escapes.escape(visible(words))

    fitted = load_fitted(path)
    with np.errstate(all="ignore"):
        drawn, told = pictures(fitted), sections(fitted)
    body = [f"<h1>{plain(fitted.file.name)}</h1>"]
    for section in told:
        body += _section(section, plain)
        if section.picture in drawn:
            picture = drawn[section.picture]
            body.append(_figure(picture.svg, plain(picture.caption)))
    title = plain(f"{fitted.file.name}: calibration")
    return _PAGE.format(title=title, style=_STYLE, body="\n".join(body))


def _wrapped(words: Sequence[str]) -> Iterator[str]:
    for sentence in words:
        yield from textwrap.wrap(sentence, _WIDTH, break_long_words=False)


def _aligned(section: Section) -> list[str]:
    """The table in columns: numbers to the right, words to the left."""
    rows = [row for row in (section.header, *section.rows) if row]
    columns = list(zip(*rows, strict=True))
    widths = [max(map(len, column)) for column in columns]
    right = [_is_figures(column[1:] if section.header else column) for column in columns]
    gap = "  " if sum(widths) + 2 * (len(widths) - 1) <= _WIDTH else " "
    return [
        gap.join(
            f"{cell:>{width}}" if to_right else f"{cell:{width}}"
            for cell, width, to_right in zip(row, widths, right, strict=True)
        ).rstrip()
        for row in rows
    ]


def _is_figures(cells: Sequence[str]) -> bool:
    """Whether a column holds numbers, ranges of them, or nothing."""
    return any(cells) and all(not cell or cell[0] in "+-.0123456789" for cell in cells)


def _section(section: Section, plain: Callable[[str], str]) -> Iterator[str]:
    yield f"<h2>{plain(section.title)}</h2>"
    yield from (f"<p>{plain(words)}</p>" for words in section.words)
    if not section.rows:
        return
    yield '<div class="table"><table>'
    if section.header:
        yield f"<thead>{_row(section.header, 'th', plain)}</thead>"
    yield "<tbody>"
    yield from (_row(row, "td", plain) for row in section.rows)
    yield "</tbody></table></div>"


def _row(cells: Sequence[str], tag: str, plain: Callable[[str], str]) -> str:
    return f"<tr>{''.join(f'<{tag}>{plain(cell)}</{tag}>' for cell in cells)}</tr>"


def _figure(svg: bytes, caption: str) -> str:
    # As an image, and not as part of the page, a drawing can neither run nor load anything.
    data = base64.b64encode(svg).decode("ascii")
    return (
        f'<figure><img src="data:image/svg+xml;base64,{data}" alt="{caption}">'
        f"<figcaption>{caption}</figcaption></figure>"
    )


_STYLE = """\
body { margin: 2rem auto; max-width: 60rem; padding: 0 1rem; background: #ffffff; color: #1c2126;
  font: 16px/1.5 system-ui, sans-serif; }
h1 { font-size: 1.7rem; margin-bottom: 0; overflow-wrap: anywhere; }
h2 { font-size: 1.15rem; margin: 2.2rem 0 0.4rem; border-top: 2px solid #0072b2; padding-top: 0.5rem; }
p { margin: 0.3rem 0; max-width: 46rem; overflow-wrap: anywhere; }
.table { overflow-x: auto; }
table { border-collapse: collapse; font-size: 0.9rem; font-variant-numeric: tabular-nums; margin: 0.6rem 0; }
th { text-align: left; color: #4a545e; font-weight: 600; border-bottom: 1px solid #8b96a1; }
th, td { padding: 0.15rem 1.1rem 0.15rem 0; vertical-align: top; overflow-wrap: anywhere; }
tbody tr:nth-child(even) { background: #f4f6f8; }
figure { margin: 1rem 0; }
img { width: 100%; height: auto; }
figcaption { color: #4a545e; font-size: 0.9rem; max-width: 46rem; }
@media print { h2, figure { break-inside: avoid; break-after: avoid; } }"""

_PAGE = """\
<!DOCTYPE html>
<html lang="en">
<head>
<meta charset="utf-8">
<meta http-equiv="Content-Security-Policy" content="default-src 'none'; img-src data:; style-src 'unsafe-inline'">
<meta name="viewport" content="width=device-width, initial-scale=1">
<title>{title}</title>
<style>
{style}
</style>
</head>
<body>
{body}
</body>
</html>
"""
