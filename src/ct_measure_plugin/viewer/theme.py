"""napari's colours for what we paint ourselves, and line colours that everyone can tell apart."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

__all__ = ["Colours", "colours_of"]

# Colours that stay apart for colour-blind readers: Okabe and Ito, "Color universal design", 2008
# (sky blue, orange, bluish green, reddish purple, yellow, vermilion). On a light ground they are
# darkened, hue kept, until each has a contrast of 3 to 1 (WCAG 2.1, 1.4.11).
_ON_DARK = ("#56B4E9", "#E69F00", "#009E73", "#CC79A7", "#F0E442", "#D55E00")
_ON_LIGHT = ("#0072B2", "#C25200", "#007A59", "#A8568A", "#7A5000", "#000000")


@dataclass(frozen=True, slots=True)
class Colours:
    """Colours of a theme, as ``#rrggbb``.

    Attributes
    ----------
    dark : bool
        True for light text on a dark ground.
    background, foreground, text, highlight, warning, error : str
        As napari names them.
    lines : tuple of str
        For curves, in order; use line styles with them, never colour alone.
    """

    dark: bool
    background: str
    foreground: str
    text: str
    highlight: str
    warning: str
    error: str
    lines: tuple[str, ...]


def colours_of(viewer: Any) -> Colours:
    """Return the colours of a viewer's theme.

    ``viewer.events.theme`` tells when they change.
    """
    from napari.utils.theme import get_theme

    theme = get_theme(viewer.theme)
    dark = theme.type == "dark"
    return Colours(
        dark=dark,
        background=_hex(theme.background),
        foreground=_hex(theme.foreground),
        text=_hex(theme.text),
        highlight=_hex(theme.highlight),
        warning=_hex(theme.warning),
        error=_hex(theme.error),
        lines=_ON_DARK if dark else _ON_LIGHT,
    )


def _hex(colour: Any) -> str:
    return str(colour.as_hex(format="long"))[:7]
