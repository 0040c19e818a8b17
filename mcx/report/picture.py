"""The picture of `mcx methods`: standard error against time, both on logarithmic axes, one line for each choice.

Lines differ in colour, dash and marker, and are named at their ends, so that nothing hangs on colours alone. The colours
are those of M. Okabe and K. Ito, "Color universal design" (2008), chosen for colour-blind eyes.
"""

from __future__ import annotations

import math
from pathlib import Path
from textwrap import fill

from mcx.faults import RequestError
from mcx.report.method_results import MethodsResult

COLOURS = ("#000000", "#0072B2", "#D55E00", "#009E73", "#CC79A7", "#E69F00", "#56B4E9")
DASHES = ("-", "--", "-.", ":")
MARKERS = ("o", "s", "^", "D", "v", "P", "X")
SUFFIXES = (".png", ".svg")
WIDTH = 110  # letters in a line below


def check_picture(file: str | Path) -> None:
    """Raises RequestError where a picture could not be drawn: found out before the work, not after."""
    target = Path(file)
    if target.suffix.lower() not in SUFFIXES:
        raise RequestError(f"{target}: a picture is drawn as .png or .svg, by the suffix of its file")
    if not target.parent.is_dir():
        raise RequestError(f"{target}: there is no folder '{target.parent}'")
    try:
        import matplotlib  # noqa: F401
    except ImportError:
        raise RequestError("a picture needs the package 'matplotlib', which is not installed") from None


def draw_methods(result: MethodsResult, file: str | Path) -> None:
    """Writes the picture; raises RequestError where the file cannot be written."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg
    from matplotlib.backends.backend_svg import FigureCanvasSVG
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.0, 6.0), layout="constrained")
    axes = figure.add_subplot()
    factor = 100.0 if result.notional is not None else 1.0
    shown = [line for line in result.methods if line.efficiency is not None]
    ends = []
    for number, line in enumerate(shown):
        points = [point for point in line.convergence if point.standard_error > 0.0]
        if not points:
            continue
        colour = COLOURS[number % len(COLOURS)]
        seconds, errors = [point.seconds for point in points], [factor * point.standard_error for point in points]
        axes.loglog(seconds, errors, color=colour, linestyle=DASHES[number // len(COLOURS) % len(DASHES)],
                    marker=MARKERS[number % len(MARKERS)], markersize=4.5, linewidth=1.6)
        ends.append((seconds[-1], errors[-1], _named(line.method), colour))
    _name_lines(axes, ends)
    exact = ", ".join(_named(line.method) for line in result.methods if line.efficiency is None)
    axes.set_xlabel("seconds" + ("\n" + fill(f"exact, and so not drawn: {exact}", WIDTH) if exact else ""))
    axes.set_ylabel(f"standard error, {'% of the notional' if factor > 1.0 else f'{result.currency} per unit'}")
    axes.set_title(f"{result.contract}: error against time", loc="left")
    axes.grid(True, which="major", alpha=0.35)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    canvas = (FigureCanvasSVG if Path(file).suffix.lower() == ".svg" else FigureCanvasAgg)(figure)
    try:
        canvas.print_figure(str(file), dpi=150)
    except OSError as error:
        raise RequestError(f"{file}: the picture cannot be written: {error.strerror or error}") from None


def _named(method: str) -> str:
    return method.replace(",", " + ")


def _name_lines(axes, ends: list[tuple[float, float, str, str]]) -> None:
    """Each line's name to the right of all lines, moved apart where they would touch, with a thread to its end."""
    if not ends:
        return
    low, high = axes.get_ylim()
    room = (math.log(high) - math.log(low)) / 24.0
    right = max(seconds for seconds, *_ in ends) * 1.25
    height = math.inf
    for seconds, error, name, colour in sorted(ends, key=lambda end: -end[1]):
        height = min(math.log(error), height - room)
        axes.annotate(name, (seconds, error), (right, math.exp(height)), color=colour, fontsize=8.5, va="center",
                      arrowprops={"arrowstyle": "-", "color": colour, "linewidth": 0.6, "alpha": 0.6})
    axes.set_ylim(min(low, math.exp(height - room)), high)
