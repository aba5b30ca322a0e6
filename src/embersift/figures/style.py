"""The look of the figures: one mark per fate, told apart by colour, lightness, shape and hatch.

The colours climb a ladder of lightness in different hues, so that they stay apart in grey and for
colour-blind readers; shape, line and hatch say the same once more.
"""

from __future__ import annotations

import re
import textwrap
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import TYPE_CHECKING, Any

from embersift.errors import EmbersiftError

if TYPE_CHECKING:
    from matplotlib.axes import Axes

__all__ = [
    "FATE_MARKS",
    "INK",
    "PAPER",
    "THRESHOLD_MARKS",
    "FiguresMissing",
    "Mark",
    "dress",
    "new_axes",
    "plain",
    "power",
    "require_matplotlib",
    "threshold_mark",
]

INK, SOFT_INK, RULE, PAPER = "#1d2430", "#59616e", "#d5d8dd", "#ffffff"
_SMALL = 8.5  # points


class FiguresMissing(EmbersiftError):
    """Figures were asked for, and matplotlib is not installed."""


@dataclass(frozen=True)
class Mark:
    """How one thing is drawn, whatever the figure."""

    label: str
    colour: str
    shape: str
    line: str | tuple[int, tuple[float, ...]] = "-"
    hatch: str = ""
    open: bool = False


FATE_MARKS: Mapping[str, Mark] = MappingProxyType(
    {
        "visible": Mark("visible", "#0b1f3f", "o", "-"),
        "blended": Mark("blended", "#5b2160", "P", (0, (1.0, 1.0)), "++"),
        "outshone": Mark("outshone", "#a8321f", "^", (0, (5.0, 1.5)), "//"),
        "underfloor": Mark("underfloor", "#1f8079", "s", (0, (1.5, 1.2)), ".."),
        "several": Mark("several at once", "#7f93c9", "X", (0, (5.0, 1.2, 1.2, 1.2)), "xx"),
        "faint": Mark("faint", "#e0a63a", "v", (0, (8.0, 2.0)), "\\\\"),
        "dormant": Mark("dormant", "#e2dccb", "o", (0, (2.5, 2.5)), "", True),
    }
)
"""By fate; rows that fail several criteria share one mark. From dark to light."""

THRESHOLD_MARKS: tuple[Mark, ...] = (
    Mark("", "#e0a63a", "v", (0, (8.0, 2.0))),
    Mark("", "#0b1f3f", "o", "-"),
    Mark("", "#1f8079", "s", (0, (1.5, 1.2))),
    Mark("", "#a8321f", "^", (0, (5.0, 1.5))),
    Mark("", "#7f93c9", "X", (0, (5.0, 1.2, 1.2, 1.2))),
    Mark("", "#5b2160", "P", (0, (1.0, 1.0))),
)


def threshold_mark(place: int) -> Mark:
    """The mark of the n-th threshold; with very many they repeat."""
    return THRESHOLD_MARKS[place % len(THRESHOLD_MARKS)]


def plain(words: str) -> str:
    """Words of the user's own, kept from being read as mathematics."""
    return words.replace("$", r"\$")


def power(value: float) -> str:
    """A number as a label writes it: powers of ten as such.

    Examples
    --------
    >>> power(1e39), power(3.5e-16), power(20.0)
    ('$10^{39}$', '$3.5\\\\times10^{-16}$', '20')
    """
    if 1e-3 <= abs(value) < 1e5 or value == 0.0:
        return f"{value:g}"
    digits, exponent = f"{value:.3e}".split("e")
    front = f"{float(digits):g}"
    times = "" if front == "1" else f"{front}\\times"
    return f"${times}10^{{{int(exponent)}}}$"


def require_matplotlib() -> None:
    """Check that figures can be drawn.

    Raises
    ------
    FiguresMissing
        With what to install.
    """
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise FiguresMissing(
            "Figures need matplotlib, which is not installed: pip install 'embersift[figures]'"
        ) from None


def new_axes(width: float = 6.2, height: float = 4.6) -> Axes:
    """Axes on a figure of their own, outside pyplot's list of open figures."""
    require_matplotlib()
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    figure = Figure(figsize=(width, height), layout="constrained", facecolor=PAPER)
    FigureCanvasAgg(figure)
    return figure.add_subplot()


def dress(ax: Axes, *, x: str, y: str, title: str, handles: Any = (), columns: int = 4) -> None:
    """Labels, rules and the line above the axes: what is shown, then what each mark means."""
    ax.set_facecolor(PAPER)
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(SOFT_INK)
    ax.tick_params(colors=INK, labelsize=9, length=3.5, color=SOFT_INK)
    ax.grid(axis="y", color=RULE, linewidth=0.6)
    ax.set_axisbelow(True)
    ax.set_xlabel(x, fontsize=9.5, color=INK, linespacing=1.35)
    ax.set_ylabel(y, fontsize=9.5, color=INK, linespacing=1.35)
    handles = list(handles)
    room = 1.1 * ax.get_window_extent().width / ax.figure.dpi * 72.0
    title = "\n".join(textwrap.fill(line, int(room / 5.0) + 16) for line in title.split("\n"))
    if not handles:
        ax.set_title(title, loc="left", fontsize=9.5, color=INK)
        return
    legend = ax.legend(
        handles=handles,
        title=title,
        loc="lower left",
        bbox_to_anchor=(0.0, 1.0),
        borderaxespad=0.2,
        borderpad=0.0,
        ncols=_columns(handles, room, columns),
        frameon=False,
        fontsize=_SMALL,
        title_fontsize=9.5,
        alignment="left",
        handlelength=2.4,
        columnspacing=1.4,
        labelcolor=INK,
    )
    legend.get_title().set_color(INK)


def _columns(handles: list[Any], room: float, most: int) -> int:
    """Columns of a legend that fit into so many points, or else the axes would be squeezed."""
    widest = max(len(re.sub(r"[$\\^{}]|times", "", str(h.get_label()))) for h in handles)
    # letters are some 0.57 em wide; handle, its gap and the gap between columns are 4.6 em
    column = _SMALL * (0.57 * widest + 4.6)
    return max(1, min(most, len(handles), int(room / column)))
