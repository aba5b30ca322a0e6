"""The figures of a report, as elements of its page."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

from embersift.figures import FIGURES
from embersift.figures.output import figure_bytes
from embersift.figures.reading import View
from embersift.figures.style import new_axes

__all__ = ["Picture", "inline_svg", "pictures_of"]


@dataclass(frozen=True)
class Picture:
    id: str
    title: str
    shows: str
    svg: str


def pictures_of(views: Sequence[View]) -> list[Picture]:
    """Every figure for the first observation, those that depend on the limit for the others."""
    pictures = []
    for place, view in enumerate(views):
        for name, kind in FIGURES.items():
            if name == "ranking" or (place and name in ("light", "masses")):
                continue
            ax = kind.function(
                view.reading,
                observation=view.observation.name,
                threshold=view.threshold,
                ax=new_axes(5.5, 4.5),  # smaller: its words stay legible on a phone
            )
            key = f"fig{place + 1}-{name}"
            title = f"{kind.title}: {view.observation.name}" if len(views) > 1 else kind.title
            pictures.append(Picture(key, title, kind.shows, inline_svg(ax, key)))
    return pictures


def inline_svg(ax: Any, key: str) -> str:
    """The drawing as an element of a page: ids of its own, no declarations, no metadata."""
    text = figure_bytes(ax, "svg").decode("utf-8")
    text = text[text.index("<svg") :]
    text = re.sub(r"\s*<metadata>.*?</metadata>", "", text, flags=re.DOTALL)
    # its style sheet would apply to the whole page; the page's own says the same
    text = re.sub(r"<defs>\s*<style.*?</style>\s*</defs>", "", text, flags=re.DOTALL)
    text = re.sub(r'\bid="', f'id="{key}-', text)
    text = text.replace("url(#", f"url(#{key}-").replace('href="#', f'href="#{key}-')
    head = text[: text.index(">") + 1]
    box = re.search(r'viewBox="[^"]*"', head)
    assert box is not None
    opening = (
        f'<svg {box[0]} xmlns="http://www.w3.org/2000/svg" '
        'xmlns:xlink="http://www.w3.org/1999/xlink" role="img" '
        f'aria-labelledby="{key}-title" aria-describedby="{key}-shows" focusable="false">'
    )
    return opening + text[len(head) :].strip()
