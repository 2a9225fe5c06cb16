r"""Symbols such as ``$\sigma_p$`` as small inline pictures, so that the page needs no script and no font of its own."""

from __future__ import annotations

import re
from functools import lru_cache

from markupsafe import Markup, escape
from matplotlib.font_manager import FontProperties
from matplotlib.path import Path as Outline
from matplotlib.textpath import TextPath, text_to_path

from ..style import figure_style

_SIZE = 16.0
"""Size of the font in pixels of the page."""
_COMMANDS = {Outline.MOVETO: "M", Outline.LINETO: "L", Outline.CURVE3: "Q", Outline.CURVE4: "C"}


def rich_text(text: str) -> Markup:
    """Turn text with ``$...$`` formulas into HTML; everything else is escaped."""
    parts = re.split(r"(\$[^$]+\$)", text)
    return Markup("").join(_formula(part) if part.startswith("$") and len(part) > 2 else escape(part) for part in parts)


def plain_text(text: str) -> str:
    """The same for an alternative text: formulas lose their markup."""
    text = re.sub(r"\\(?:mathrm|langle|rangle)(?![A-Za-z])\s*|[$^{}]", "", text)
    return re.sub(r"\\([A-Za-z]+)", r"\1", text).replace("_", " ").strip()


@lru_cache(maxsize=256)
def _formula(formula: str) -> Markup:
    with figure_style():
        font = FontProperties(family="STIXGeneral", size=_SIZE)
        width, height, descent = text_to_path.get_text_width_height_descent(formula, font, ismath=True)
        outline = TextPath((0.0, 0.0), formula, size=_SIZE, prop=font)
    top = height - descent
    steps = []
    for points, code in outline.iter_segments(curves=True, simplify=False):
        if code == Outline.CLOSEPOLY:
            steps.append("Z")
            continue
        # Pixels grow downwards.
        places = [f"{value:.2f}" if axis % 2 == 0 else f"{top - value:.2f}" for axis, value in enumerate(points)]
        steps.append(_COMMANDS[code] + " ".join(places))
    return Markup(
        '<svg class="formula" role="img" aria-label="{label}" width="{width}" height="{height}" '
        'viewBox="0 0 {width} {height}" style="vertical-align:{drop}px"><path d="{path}"/></svg>'
    ).format(
        label=plain_text(formula),
        width=f"{width + 0.5:.1f}",
        height=f"{height + 0.5:.1f}",
        drop=f"{-descent:.1f}",
        path="".join(steps),
    )
