"""Figures as SVG that can stand in a page beside others.

Matplotlib writes a whole document. In a page only the element may stay; its ids get a prefix of
their own, so that clip paths, hatches and glyphs of two figures do not take each other's place.
What it repeats for each mark (styles, path commands) is written once or shortened.
"""

from __future__ import annotations

import re
from html import escape
from typing import TYPE_CHECKING

from fathomline.report.figures import render_figure

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["inline_svg"]

_OPENING = re.compile(r"<svg\b[^>]*>")
_VIEW_BOX = re.compile(r'viewBox="([^"]*)"')
_ELSEWHERE = re.compile(r"<metadata>.*?</metadata>|<style\b.*?</style>|<!--.*?-->", re.DOTALL)
_ID = re.compile(r' id="([^"]*)"')
_REFERENCE = re.compile(r'(?:href="#|url\(#)([^")]*)')
_STYLE = re.compile(r' style="([^"]*)"')
_PATH_DATA = re.compile(r' d="([^"]*)"')
_COMMAND = re.compile(r"([MLQCZz])([^MLQCZz]*)")
_PLACE = re.compile(r' (x|y)="(-?\d+\.\d+)"')


def inline_svg(figure: Figure, prefix: str, label: str) -> str:
    """The SVG element of a figure, for a page.

    Parameters
    ----------
    figure : Figure
        A figure of `fathomline.report.figures`.
    prefix : str
        Put before every id and class: letters, digits and hyphens, different for each figure of
        a page.
    label : str
        What the figure shows, for those who do not see it; escaped here.

    """
    text = render_figure(figure, "svg").decode("utf-8")
    opening = _OPENING.search(text)
    if opening is None:  # pragma: no cover - matplotlib always writes one
        raise ValueError("no svg element in matplotlib's output")
    view_box = _VIEW_BOX.search(opening[0])
    box = view_box[1] if view_box is not None else ""
    body = _ELSEWHERE.sub("", text[opening.end() :])
    body = _only_needed_ids(body, prefix)
    styles: dict[str, str] = {}
    body = _STYLE.sub(lambda m: _as_class(m[1], prefix, styles), body)
    body = _PATH_DATA.sub(lambda m: f' d="{_short_path(m[1])}"', body)
    body = _PLACE.sub(lambda m: f' {m[1]}="{_short(float(m[2]))}"', body)
    body = re.sub(r"\n\s*", "\n", body)
    sheet = "".join(f".{name}{{{style}}}" for style, name in styles.items())
    # the document's style sheet would reach the whole page, so it becomes inherited properties
    return (
        f'<svg viewBox="{box}" role="img" aria-label="{escape(label)}" '
        f'style="stroke-linejoin:round;stroke-linecap:butt">\n<style>{sheet}</style>{body}'
    )


def _only_needed_ids(body: str, prefix: str) -> str:
    """Drop the ids that nothing refers to, and put the prefix before the others."""
    needed = set(_REFERENCE.findall(body))
    body = _ID.sub(lambda m: f' id="{prefix}-{m[1]}"' if m[1] in needed else "", body)
    body = re.sub(r'(?:xlink:)?href="#', f'href="#{prefix}-', body)
    return re.sub(r"url\(#", f"url(#{prefix}-", body)


def _as_class(style: str, prefix: str, styles: dict[str, str]) -> str:
    compact = re.sub(r"\s*([:;])\s*", r"\1", style)
    name = styles.setdefault(compact, f"{prefix}-s{len(styles)}")
    return f' class="{name}"'


def _short(value: float) -> str:
    """A hundredth of a point is finer than any screen or printer resolves here."""
    text = f"{value:.2f}".rstrip("0").rstrip(".")
    return "0" if text in ("-0", "") else text


def _short_path(data: str) -> str:
    """The same path in fewer characters: horizontal and vertical steps have their own command."""
    parts: list[str] = []
    here = ("", "")
    for command, rest in _COMMAND.findall(data):
        numbers = [_short(float(number)) for number in rest.split()]
        if command == "L" and len(numbers) == 2:
            x, y = numbers
            if (x, y) == here:
                continue
            if y == here[1]:
                parts.append(f"H{x}")
            elif x == here[0]:
                parts.append(f"V{y}")
            else:
                parts.append(f"L{x} {y}")
        else:
            parts.append(command + " ".join(numbers))
        if len(numbers) >= 2:
            here = (numbers[-2], numbers[-1])
    return "".join(parts)
