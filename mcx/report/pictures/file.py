"""Pictures as a file: those of a page, one below the other under their titles, as SVG or PNG by the suffix.

An SVG needs nothing else. For a PNG the same shapes are painted by matplotlib, which is imported only then: pictures
are laid out in one place, whatever they become.
"""

from __future__ import annotations

import io
import warnings
from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING
from xml.etree import ElementTree

from mcx.faults import RequestError
from mcx.report.pictures.canvas import ROW, SIZE, Canvas, fit
from mcx.report.pictures.palette import INKS, LIGHT

if TYPE_CHECKING:
    from matplotlib.axes import Axes

SUFFIXES = (".png", ".svg")
MARGIN, HEAD, LEAST = 12.0, 26.0, 400.0
DOTS = 200  # for 100 units of a picture
POINTS = 0.72  # of type for one unit
SVG = "{http://www.w3.org/2000/svg}"  # before the names of what was read


def check_picture(file: str | Path) -> None:
    """Raises RequestError where a picture could not be drawn: found out before the work, not after."""
    target = Path(file)
    if target.suffix.lower() not in SUFFIXES:
        raise RequestError(f"{target}: a picture is drawn as .png or .svg, by the suffix of its file")
    if target.is_dir():
        raise RequestError(f"{target}: this is a folder; expected the name of a file for the picture")
    if not target.parent.is_dir():
        raise RequestError(f"{target}: there is no folder '{target.parent}'")
    if target.suffix.lower() == ".png":
        try:
            import matplotlib  # noqa: F401
        except ImportError:
            raise RequestError("a picture as .png needs the package 'matplotlib', which is not installed; .svg needs "
                               "nothing else") from None


def write_pictures(file: str | Path, title: str, answer: str, pictures: Sequence[tuple[str, str]]) -> None:
    """Writes pictures (title, SVG) as one file, whole or not at all; raises RequestError where it cannot be written."""
    root = stacked(title, answer, pictures)
    text = ElementTree.tostring(root, encoding="unicode")
    data = _painted(root) if Path(file).suffix.lower() == ".png" else text.encode()
    try:
        Path(file).write_bytes(data)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise RequestError(f"{file}: the picture cannot be written: {reason}") from None


def stacked(title: str, answer: str, pictures: Sequence[tuple[str, str]]) -> ElementTree.Element:
    """One SVG on white paper with all the pictures, each a part of its own with its words."""
    parts = [(name, _read(svg)) for name, svg in pictures]
    wide = 2 * MARGIN + max((float(part.get("width")) for _, part in parts), default=LEAST)
    high = 2 * MARGIN + 2 * HEAD + sum(HEAD + MARGIN + float(part.get("height")) for _, part in parts)
    said = f"{answer}. {len(parts)} pictures: {'; '.join(name for name, _ in parts)}."
    canvas = Canvas(wide, high, title, said)
    ElementTree.SubElement(canvas.root, "rect", {"width": "100%", "height": "100%", "fill": INKS["paper"][LIGHT]})
    canvas.text(MARGIN, MARGIN + SIZE, fit(title, wide - 2 * MARGIN))
    canvas.text(MARGIN, MARGIN + SIZE + ROW, fit(answer, wide - 2 * MARGIN))
    top = MARGIN + 2 * HEAD
    for name, part in parts:
        canvas.text(MARGIN, top + SIZE, fit(name, wide - 2 * MARGIN), kind="soft")
        part.set("x", f"{MARGIN:g}")
        part.set("y", f"{top + HEAD:g}")
        canvas.root.append(part)
        top += HEAD + MARGIN + float(part.get("height"))
    return canvas.root


def _read(svg: str) -> ElementTree.Element:
    """A picture with plain names, which are in the namespace of what it is put into."""
    root = ElementTree.fromstring(svg)
    for node in root.iter():
        node.tag = node.tag.removeprefix(SVG)
    return root


def _painted(root: ElementTree.Element) -> bytes:
    """The shapes of a picture as PNG, with letters of the font that comes with matplotlib. A letter that it has not is
    drawn as a box; matplotlib would warn of each. An SVG leaves letters to its reader."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.figure import Figure

    wide, high = (float(root.get(side)) for side in ("width", "height"))
    figure = Figure(figsize=(wide / 100.0, high / 100.0), dpi=DOTS, facecolor=INKS["paper"][LIGHT])
    axes = figure.add_axes((0.0, 0.0, 1.0, 1.0), xlim=(0.0, wide), ylim=(high, 0.0))
    axes.set_axis_off()
    for node in root:
        _paint(axes, node, 0.0, 0.0)
    for part in root.findall("svg"):
        for node in part:
            _paint(axes, node, float(part.get("x")), float(part.get("y")))
    found = io.BytesIO()
    with warnings.catch_warnings():
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        FigureCanvasAgg(figure).print_png(found)
    return found.getvalue()


def _paint(axes: Axes, node: ElementTree.Element, dx: float, dy: float) -> None:
    """One shape, moved by (dx, dy)."""
    from matplotlib.lines import Line2D
    from matplotlib.patches import Circle, Polygon, Rectangle

    def at(x: str, y: str) -> tuple[float, float]:
        return float(node.get(x)) + dx, float(node.get(y)) + dy

    points = [(float(x) + dx, float(y) + dy) for x, y in (pair.split(",") for pair in node.get("points", "").split())]
    over = len(axes.get_children())  # painted in the order of the file, as an SVG is
    thick = POINTS * float(node.get("stroke-width", 1.0))
    filled = {"facecolor": node.get("fill"), "alpha": float(node.get("fill-opacity", 1.0)), "linewidth": 0.0, "zorder": over}
    match node.tag:
        case "text":
            side = {"start": "left", "middle": "center", "end": "right"}[node.get("text-anchor")]
            axes.text(*at("x", "y"), node.text or "", color=node.get("fill"), ha=side, va="baseline",
                      fontsize=0.92 * POINTS * SIZE, parse_math=False, zorder=over)
        case "line":
            (x1, y1), (x2, y2) = at("x1", "y1"), at("x2", "y2")
            axes.add_line(Line2D((x1, x2), (y1, y2), color=node.get("stroke"), linewidth=thick, zorder=over))
        case "polyline":
            dashes = [float(length) for length in node.get("stroke-dasharray", "").split()]
            style = (0, [length * POINTS / thick for length in dashes]) if dashes else "-"
            axes.add_line(Line2D(*zip(*points, strict=True), color=node.get("stroke"), linewidth=thick,
                                 linestyle=style, zorder=over))
        case "polygon":
            axes.add_patch(Polygon(points, **filled))
        case "circle":
            axes.add_patch(Circle(at("cx", "cy"), float(node.get("r")), **filled))
        case "rect" if node.get("x") is not None:
            axes.add_patch(Rectangle(at("x", "y"), float(node.get("width")), float(node.get("height")), **filled))
