"""Small drawings within a line of text: the line of a contender, and the sign of a state.

The sign is a bar and an upright: the bar is what was found, the upright the limit. Bar wholly
before the limit: met. Wholly beyond: failed. Across: open.
"""

from markupsafe import Markup

from idlearn.reports.inks import PAPER, Look

# on a square from -3.2 to 3.2 around the middle of the swatch
_MARKER = {
    "o": '<circle r="3.2"/>',
    "s": '<path d="M-3-3H3V3H-3z"/>',
    "D": '<path d="M0-4 4 0 0 4-4 0z"/>',
    "d": '<path d="M0-4 2.6 0 0 4-2.6 0z"/>',
    "^": '<path d="M0-3.8 3.6 3H-3.6z"/>',
    "v": '<path d="M0 3.8 3.6-3H-3.6z"/>',
    "P": '<path d="M-1.4-3.8H1.4V-1.4H3.8V1.4H1.4V3.8H-1.4V1.4H-3.8V-1.4H-1.4z"/>',
    "X": '<path d="M-3.6-2 -2-3.6 0-1.6 2-3.6 3.6-2 1.6 0 3.6 2 2 3.6 0 1.6-2 3.6-3.6 2-1.6 0z"/>',
    "|": '<path d="M-.9-5H.9V5H-.9z"/>',
    "h": '<path d="M0-3.8 3.3-1.9V1.9L0 3.8-3.3 1.9V-1.9z"/>',
    "p": '<path d="M0-3.8 3.6-1.2 2.2 3.1H-2.2L-3.6-1.2z"/>',
    "*": '<path d="M0-4.2 1.1-1.3H4.2L1.7.6 2.6 3.6 0 1.8-2.6 3.6-1.7.6-4.2-1.3H-1.1z"/>',
    "8": '<path d="M-1.5-3.6H1.5L3.6-1.5V1.5L1.5 3.6H-1.5L-3.6 1.5V-1.5z"/>',
    "H": '<path d="M-1.9-3.3H1.9L3.8 0 1.9 3.3H-1.9L-3.8 0z"/>',
}


def swatch(look: Look) -> Markup:
    """Return the line and the marker of a contender, to stand before its name."""
    dash = " ".join(f"{1.6 * d:g}" for d in look.dash)
    dashes = f' stroke-dasharray="{dash}"' if dash else ""
    return Markup(
        '<svg class="swatch" viewBox="-17 -6 34 12" width="34" height="12" aria-hidden="true" '
        f'focusable="false"><path d="M-17 0H17" stroke="{look.colour}" stroke-width="1.6" '
        f'fill="none"{dashes}/><g fill="{look.colour}" stroke="{PAPER}" stroke-width=".8">'
        f"{_MARKER[look.marker]}</g></svg>"
    )


# upright, left end and width of the bar
_BAR = {"met": (29, 1, 22), "failed": (3, 9, 22), "open": (16, 2, 28)}


def sign(state: str) -> Markup:
    """Return the sign of a state: "met", "failed" or "open"; nothing for any other."""
    if state not in _BAR:
        return Markup("")
    upright, left, width = _BAR[state]
    fill = "none" if state == "open" else "currentColor"
    return Markup(
        '<svg class="sign" viewBox="0 0 32 20" width="32" height="20" aria-hidden="true" '
        f'focusable="false"><path d="M{upright} 1V19" stroke="currentColor" stroke-width="2"/>'
        f'<rect x="{left}" y="6.5" width="{width}" height="7" fill="{fill}" '
        'stroke="currentColor" stroke-width="1.5"/></svg>'
    )
