"""What all pictures share: sizes, style, wrapped titles and legends, and the files they are written to."""

import textwrap
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib import rc_context
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from matplotlib.patheffects import withStroke
from matplotlib.textpath import text_to_path

from habitat.files import atomic_path

ONE_COLUMN, TWO_COLUMNS = 90 / 25.4, 180 / 25.4
"""Widths of pictures [inch]."""

TITLE_SIZE, LABEL_SIZE, SMALL = 8.0, 6.5, 6.0
"""Sizes of letters [pt]."""

STYLE = {
    "axes.linewidth": 0.6,
    "font.family": "DejaVu Sans",  # comes with matplotlib, so a picture is the same on every machine
    "font.size": 7,
    "hatch.linewidth": 0.3,
    "lines.linewidth": 1.2,
    "lines.markersize": 3,
    "svg.hashsalt": "habitat",  # else the names of elements in an SVG differ from run to run
    "text.parse_math": False,  # names belong to the user; a dollar sign in one is a dollar sign
}
LINE_STYLES = ("-", "--", "-.", ":", (0, (5, 1, 1, 1, 1, 1)))
HALO = [withStroke(linewidth=2.4, foreground="white")]


@rc_context(STYLE)
def save(figure: Figure, stem: Path) -> list[Path]:
    """Write a picture as `stem`.png (300 dpi) and `stem`.svg, byte for byte the same in every run.

    Raises
    ------
    OutputError
        The folder is missing or not writable, or the disk is full.
    """
    paths = [stem.with_name(f"{stem.name}.{suffix}") for suffix in ("png", "svg")]
    for path, metadata in zip(paths, ({}, {"Date": None}), strict=True):
        with atomic_path(path) as temporary:
            figure.savefig(temporary, dpi=300, metadata=metadata)
    return paths


def pick(styles: Sequence[Any], number: int) -> Any:
    """Style number `number`, starting again when there are no more."""
    return styles[number % len(styles)]


def shortened(text: str, length: int) -> str:
    """Text cut to `length` letters, the last one an ellipsis."""
    return text if len(text) <= length else f"{text[: length - 1]}…"


def _wrapped(text: str, width: float, size: float) -> str:
    """Break a text into lines that are at most `width` wide at a font size [pt]."""
    font = FontProperties(family=STYLE["font.family"], size=size)
    needed, _, _ = text_to_path.get_text_width_height_descent(text, font, ismath=False)
    letters = len(text) if needed <= width else max(1, int(0.92 * len(text) * width / needed))
    return textwrap.fill(text, letters, max_lines=4, placeholder=" …")


def finish(figure: Figure, title: str, handles: Sequence[Any]) -> None:
    """Add title and legend, both wrapped to the width of the figure, and make room for them."""
    width = 72 * figure.get_figwidth() - 12
    heading = _wrapped(title, width, TITLE_SIZE)
    for columns in (4, 3, 2, 1):
        labels = [_wrapped(str(handle.get_label()), width / columns - 28, LABEL_SIZE) for handle in handles]
        if not any("\n" in label for label in labels):
            break
    rows = np.ceil(sum(label.count("\n") + 1 for label in labels) / columns)
    figure.set_figheight(figure.get_figheight() + 0.13 * rows + 0.15 * (heading.count("\n") + 1))
    figure.suptitle(heading, size=TITLE_SIZE)
    style = {"ncols": columns, "handlelength": 2.2, "columnspacing": 1.2, "labelspacing": 0.3}
    figure.legend(handles, labels, loc="outside lower center", fontsize=LABEL_SIZE, frameon=False, **style)
    for axes in figure.axes:  # ticks are made late, when the style no longer holds
        axes.tick_params(which="both", labelsize=LABEL_SIZE, width=0.6, length=2.5, pad=2)
