"""The inks of pictures and pages, each for light and for dark paper.

Pictures carry the light inks as attributes, so that a file stands by itself in any program; a page lays the dark ones
over them by class, for a reader who asked for dark. Text has a contrast of at least 4.5 to its paper, lines and bars of
at least 3 (WCAG 2.1, 1.4.3 and 1.4.11); lines are told apart by dashes, marks and labels, never by ink alone.
"""

from __future__ import annotations

LIGHT, DARK = 0, 1
INKS = {  # on light paper, on dark paper
    "paper": ("#ffffff", "#161616"),
    "ink": ("#1a1a1a", "#ececec"),
    "soft": ("#595959", "#b0b0b0"),
    "rule": ("#c9c9c9", "#4a4a4a"),
    "grid": ("#dcdcdc", "#3d3d3d"),
    "fill": ("#7388a0", "#6b8199"),
    "a": ("#0b5394", "#7db7f0"),
    "b": ("#9c4a00", "#f0a35e"),
    "c": ("#2d6a4f", "#7fd1ae"),
    "d": ("#6a3d8f", "#c9a3ea"),
}
LINES = ("a", "b", "c", "d")
KINDS = {  # what is drawn: the property that has the ink, and the ink
    "paper": ("fill", "paper"), "words": ("fill", "ink"), "soft": ("fill", "soft"), "dot": ("fill", "ink"),
    "bar": ("fill", "fill"), "band": ("fill", "fill"), "grid": ("stroke", "grid"), "axis": ("stroke", "ink"), "error": ("stroke", "ink"),
    "thread": ("stroke", "soft"), **{f"line-{ink}": ("stroke", ink) for ink in LINES},
    **{f"mark-{ink}": ("fill", ink) for ink in LINES},
}


def attributes(kind: str) -> dict[str, str]:
    """What an element of a picture carries: its class, and its ink on light paper."""
    what, ink = KINDS[kind]
    return {"class": kind, what: INKS[ink][LIGHT]}


def variables() -> str:
    """The inks for a page's style: custom properties, and the dark ones in place of the light where that is wanted."""
    light, dark = ("".join(f"--{name}:{both[side]};" for name, both in INKS.items()) for side in (LIGHT, DARK))
    laid = "".join(f".mcx-picture .{kind}{{{what}:{INKS[ink][DARK]}}}" for kind, (what, ink) in KINDS.items())
    where = ":root:has(>.mcx-page),.mcx-page"
    return f"{where}{{{light}}}\n@media screen and (prefers-color-scheme:dark){{{where}{{{dark}}}\n{laid}}}\n"
