# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""How figures are drawn and saved: matplotlib is imported here only, late, and in one style."""

from __future__ import annotations

import contextlib
import io
import re
import typing
from collections.abc import Iterator
from dataclasses import dataclass

from servo_nodes.report import palette
from servo_nodes.report.record import Picture

MOST_SVG_BYTES = 160_000
_STYLE: typing.Any = {
    'svg.fonttype': 'none', 'svg.hashsalt': 'servo_nodes', 'path.simplify_threshold': 0.25,
    'font.family': ['DejaVu Sans', 'sans-serif'], 'font.size': 8.5,
    'figure.facecolor': palette.PAPER, 'axes.facecolor': 'none',
    'axes.edgecolor': palette.SOFT, 'axes.linewidth': 0.6, 'axes.spines.top': False,
    'axes.spines.right': False, 'axes.labelcolor': palette.INK, 'axes.labelsize': 8.5,
    'axes.axisbelow': True, 'axes.grid': True, 'grid.color': palette.RULE, 'grid.linewidth': 0.6,
    'xtick.color': palette.SOFT, 'ytick.color': palette.SOFT, 'xtick.labelsize': 8,
    'ytick.labelsize': 8, 'xtick.major.size': 3, 'ytick.major.size': 0, 'text.color': palette.INK,
    'lines.linewidth': 1.3, 'lines.solid_capstyle': 'round', 'legend.frameon': False,
    'legend.fontsize': 8,
}


class MissingExtra(RuntimeError):
    """A package of an extra is not installed; the text says which, and what to do."""


@dataclass(frozen=True)
class Drawing:
    """A finished figure: what it shows in words, and SVG or PNG bytes.

    `under`, when given, is the picture that a transparent drawing lies on.
    """

    name: str
    title: str
    caption: str
    media: str
    data: bytes
    under: Picture | None = None


@contextlib.contextmanager
def pyplot_style() -> Iterator[typing.Any]:
    """Yield matplotlib's `Figure` class, with the house's style in force.

    Raises
    ------
    MissingExtra
        When matplotlib is not installed.
    """
    try:
        import matplotlib
        from matplotlib.figure import Figure
    except ImportError as error:
        raise MissingExtra(
            'report: expected the package matplotlib, got none; install it with '
            "pip install 'servo_nodes[report]' or apt install python3-matplotlib") from error
    with matplotlib.rc_context(_STYLE):
        yield Figure


def saved(figure: typing.Any, *, transparent: bool = False) -> tuple[str, bytes]:
    """Return media type and bytes of a figure: SVG, or PNG where that is much smaller."""
    stream = io.StringIO()
    figure.savefig(stream, format='svg', transparent=transparent,
                   metadata={'Date': None, 'Creator': None})
    data = _tightened(stream.getvalue()).encode()
    if len(data) <= MOST_SVG_BYTES:
        return 'image/svg+xml', data
    pixels = io.BytesIO()
    figure.savefig(pixels, format='png', dpi=150, transparent=transparent,
                   metadata={'Software': None})
    return ('image/png', pixels.getvalue()) if pixels.tell() < len(data) else (
        'image/svg+xml', data)


def _tightened(svg: str) -> str:
    """Drop comments, the document type, and digits that nobody can see."""
    svg = re.sub(r'<!--.*?-->|<!DOCTYPE.*?>|<\?xml.*?\?>|<metadata>.*?</metadata>', '', svg,
                 flags=re.DOTALL)
    svg = re.sub(r' (?:d|x|y)="[^"]*"',
                 lambda part: re.sub(r'(\.\d\d)\d+', r'\1', part.group()), svg)
    return re.sub(r'\s*\n\s*', '\n', svg).strip() + '\n'
