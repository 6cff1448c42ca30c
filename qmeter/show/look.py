"""How things look: roles and their colours, and what a terminal can show.

Colours are those of Okabe and Ito (2008), told apart by every common colour vision; each role also differs in shape, so none is
carried by colour alone.
"""

from __future__ import annotations

from dataclasses import dataclass

from rich.console import Console
from rich.text import Text

FIGURE = "bold"
UNCERTAINTY = "not bold"
"""said in full, so that padding beside it is never one run with it: some SVG renderers drop a run's leading blanks"""
HEAD = "dim"
NOTE = "dim"
MEASURED = "#56B4E9"
"""sky blue: the part of the decay that the figure rests on"""
LINE = "bold #E69F00"
"""orange: the fitted line"""
UNUSED = "dim #56B4E9"
"""the level outside the fit"""
FLOOR = "dim"
DOUBT = "#D55E00"
"""vermilion: something to read before trusting a number"""
GOOD = "#009E73"
"""bluish green"""

DOUBT_MARK = "?"

_ASCII = {
    "±": "+/-",
    "·": "-",
    "–": "-",
    "—": "-",
    "−": "-",
    "π": "pi",
    "α": "alpha",
    "ω": "omega",
    "∞": "inf",
    "≈": "about ",
    "≤": "<=",
    "≥": ">=",
    "≠": "!=",
    "×": "x",
    "²": "^2",
    "µ": "u",
    "μ": "u",
    "…": "...",
    "→": "->",
    "─": "-",
    "’": "'",
    "‘": "'",
    "“": '"',
    "”": '"',
    "♯": "#",
    "♭": "b",
    "°": " deg",
    "\u00a0": " ",
    "\u2009": " ",
    "\u202f": " ",
}


@dataclass(frozen=True, slots=True)
class Look:
    """What the place where it will be read can show."""

    unicode: bool = True

    def say(self, text: str) -> str:
        """The text in the characters that can be shown; control characters never pass."""
        text = "".join(char if char.isprintable() else "\ufffd" for char in text)
        if self.unicode:
            return text
        text = "".join(_ASCII.get(char, char) for char in text)
        return text.encode("ascii", "replace").decode("ascii")

    def text(self, text: str, style: str = "") -> Text:
        """As `say`, in a style."""
        return Text(self.say(text), style=style)

    @property
    def plus_minus(self) -> str:
        """The sign before an uncertainty."""
        return self.say("±")


def look_of(console: Console) -> Look:
    """ASCII where the terminal is dumb, the old Windows console, or its encoding has no braille."""
    if console.is_dumb_terminal or console.legacy_windows:
        return Look(unicode=False)
    try:
        "⣿±─π".encode(console.encoding)
    except (UnicodeEncodeError, LookupError):
        return Look(unicode=False)
    return Look(unicode=True)
