"""The terminal's output as a picture that stands alone: no window frame, no font to fetch."""

from __future__ import annotations

import io
import re
from collections.abc import Sequence

from rich.console import Console
from rich.terminal_theme import TerminalTheme
from rich.text import Text

_THEME = TerminalTheme((22, 26, 31), (222, 224, 217), [(22, 26, 31)] + [(222, 224, 217)] * 7)
_FRAME = """\
<svg xmlns="http://www.w3.org/2000/svg" width="{terminal_width}" height="{terminal_height}" role="img">
<rect width="{terminal_width}" height="{terminal_height}" rx="6" fill="#161a1f"/>
<style>
.{unique_id}-matrix {{ font-family: "DejaVu Sans Mono", Menlo, Consolas, monospace; font-size: {char_height}px; \
line-height: {line_height}px; font-variant-ligatures: none; }}
{styles}
</style>
<defs>{lines}</defs>
<g transform="translate(12, 12)">{backgrounds}<g class="{unique_id}-matrix">{matrix}</g></g>
</svg>
"""


_MARGIN = 12.0
_LINE = 24.4
"""height of a line of text; the exporter counts one too few"""
_SIZE = re.compile(r'\b(width|height)="([0-9.]+)"')
"""the first four are those of the picture and of its ground, which have to grow by the margin"""


def render(pages: Sequence[Text], width: int) -> str:
    """SVG of the texts one below the other, `width` characters wide."""
    console = Console(record=True, width=width, file=io.StringIO(), force_terminal=True, color_system="truecolor", legacy_windows=False)
    for number, page in enumerate(pages):
        if number:
            console.print()
        console.print(page, highlight=False, no_wrap=True)
    svg = console.export_svg(title="", theme=_THEME, code_format=_FRAME, unique_id="qmeter")
    more = {"width": 2 * _MARGIN, "height": 2 * _MARGIN + _LINE}
    return _SIZE.sub(lambda found: f'{found[1]}="{float(found[2]) + more[found[1]]:.1f}"', svg, count=4)
