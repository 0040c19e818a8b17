"""Pictures: places on a scale are where the numbers say, axes are round, labels do not meet, nothing is cut off."""

from __future__ import annotations

import re
from importlib import resources
from pathlib import Path
from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as some

from mcx.report.pictures.canvas import ROW, Canvas, Scale, scale, width, written
from mcx.report.pictures.draw import (
    WIDTH,
    Bar,
    Fan,
    Rung,
    Series,
    bars,
    curve,
    errors,
    fan,
    gap_ladder,
    intervals,
    lines,
    moves,
)
from mcx.report.pictures.file import stacked, write_pictures
from mcx.report.pictures.palette import DARK, INKS, LIGHT, LINES

SVG = "{http://www.w3.org/2000/svg}"
NUMBERS = some.floats(-1e12, 1e12, allow_subnormal=False)
SPACE = some.lists(NUMBERS, min_size=1, max_size=8)


@given(SPACE, some.booleans())
def test_a_scale_holds_its_numbers(numbers: list[float], zero: bool):
    """All lie between its ends, equal numbers too, and its ticks are few and in order."""
    made = scale(numbers, 0.0, 100.0, zero)
    assert all(0.0 <= made(number) <= 100.0 for number in [*numbers, *([0.0] if zero else [])])
    ticks = made.ticks()
    assert ticks == sorted(ticks) and 1 <= len(ticks) <= 7 and all(-1e-6 <= made(tick) <= 100.000001 for tick in ticks)


def test_rounding_is_no_movement():
    """Numbers that differ by rounding only lie on one line, and its ticks can be told apart."""
    ticks = scale([8.49182, 8.49182 * (1 + 1e-14)], 0.0, 1.0).ticks()
    assert len({written(tick) for tick in ticks}) == len(ticks) > 1


def test_ticks_are_round():
    assert Scale(97.3, 104.2, 0, 1).ticks() == [98, 100, 102, 104]
    assert Scale(0.0, 0.03, 0, 1).ticks() == pytest.approx([0.0, 0.01, 0.02, 0.03])


@given(some.lists(some.floats(0.0, 200.0), min_size=1, max_size=8))
def test_labels_do_not_meet(wanted: list[float]):
    """However near their lines end, labels are a row apart and keep the lines' order."""
    canvas = Canvas(100, 200, "labels", "8 of them")
    canvas.labels(0.0, [(place, str(number), "words") for number, place in enumerate(wanted)], 10.0, 190.0)
    placed = {int(node.text): float(node.get("y")) for node in canvas.root.iter("text")}
    places = sorted(placed.values())
    assert all(upper - lower >= ROW - 0.02 for lower, upper in zip(places, places[1:], strict=False))
    order = sorted(placed, key=lambda number: placed[number])
    assert [wanted[number] for number in order] == sorted(wanted)


def read(svg: str) -> ElementTree.Element:
    return ElementTree.fromstring(svg)


def test_bars_are_as_long_as_their_numbers():
    """In proportion, on the side of their sign; words that look like markup stay words."""
    rows = [Bar("a <b>&", 30.0, 0.5, "30"), Bar("c", -15.0, 0.5, "-15"), Bar("d", 0.0, 0.0, "0")]
    picture = read(bars("amounts", "30 and -15", rows))
    found = [(float(node.get("x")), float(node.get("width"))) for node in picture.iter(f"{SVG}rect")]
    assert found[0][1] == pytest.approx(2 * found[1][1], abs=0.03) and found[2][1] == 0.0
    assert found[1][0] + found[1][1] == pytest.approx(found[0][0], abs=0.03)
    assert "a <b>&" in [node.text for node in picture.iter(f"{SVG}text")]


def test_whiskers_reach_95_percent():
    """An interval is 1.96 errors to each side, measured by the axis below it."""
    rows = [Bar("1,000 paths", 50.0, 2.0, ""), Bar("4,000 paths", 51.0, 1.0, "")]
    picture = read(intervals("price", "50 and 51", rows, "EUR"))
    spans = [float(node.get("x2")) - float(node.get("x1")) for node in picture.iter(f"{SVG}line")
             if node.get("class") == "error" and node.get("y1") == node.get("y2")]
    assert spans[0] == pytest.approx(2 * spans[1], abs=0.03)
    dots = [float(node.get("cx")) for node in picture.iter(f"{SVG}circle")]
    assert spans[1] / (dots[1] - dots[0]) == pytest.approx(2 * 1.96, rel=2e-3)


def test_a_gap_stands_beside_its_bands():
    """The dashed line of the gap runs through a band that holds it, and beside one that does not."""
    bands = [Rung("wide", -0.8, 0.8, "yes"), Rung("small", -0.2, 0.2, "no")]
    picture = read(gap_ladder("gap", "-0.5", Bar("gap", -0.5, 0.01, "-0.5"), bands, "%"))
    dashed, = [node for node in picture.iter(f"{SVG}polyline") if node.get("stroke-dasharray")]
    end = float(dashed.get("points").split(",")[0])
    spans = [(float(node.get("x")), float(node.get("x")) + float(node.get("width"))) for node in
             picture.iter(f"{SVG}rect")]
    assert [low < end < high for low, high in spans] == [True, False]


def test_moves_stand_beside_their_band():
    """A move of one half-width is at the edge of the band, one of three outside of it."""
    picture = read(moves("implied", "1 and 3", [Bar("vol", 1.0, 0.1, ""), Bar("yield", 3.0, 0.1, "")], "half-widths"))
    band = [float(pair.split(",")[0]) for pair in picture.find(f"{SVG}polygon").get("points").split()]
    dots = [float(node.get("cx")) for node in picture.iter(f"{SVG}circle")]
    assert dots[0] == pytest.approx(max(band), abs=0.1) and dots[1] > max(band)


def test_errors_fall_on_straight_lines():
    """On logarithmic axes the root of the time is a straight line; many lines keep apart in dashes, ink and marks."""
    series = [Series(f"method {number}", tuple((time, (number + 1) / time**0.5) for time in (0.1, 1.0, 10.0)))
              for number in range(16)]
    picture = read(errors("error", "16 lines", series, "seconds", "%"))
    lines_ = list(picture.iter(f"{SVG}polyline"))
    for node in lines_:
        (x0, y0), (x1, y1), (x2, y2) = (map(float, pair.split(",")) for pair in node.get("points").split())
        assert x1 - x0 == pytest.approx(x2 - x1, abs=0.2) and y1 - y0 == pytest.approx(y2 - y1, abs=0.2)
    marks = [len(node.get("points").split()) for node in picture.iter(f"{SVG}polygon")][::3]
    looks = {(node.get("stroke-dasharray"), node.get("stroke"), mark) for node, mark in zip(lines_, marks, strict=True)}
    assert len(looks) == 16
    names = [float(node.get("y")) for node in picture.iter(f"{SVG}text") if node.text.startswith("method")]
    assert min(upper - lower for lower, upper in zip(sorted(names), sorted(names)[1:], strict=False)) >= ROW - 0.02


LONG = "a name of a leg that goes on for much longer than any picture is wide, with Überlänge and 長い名前"


def test_long_names_are_cut():
    """Nothing is drawn outside, bars keep their room, and the whole name stands in the words of the picture."""
    rows = [Bar(LONG, 1.0, 0.1, "1.000"), Bar("b", -2.0, 0.1, "-2.000")]
    for svg in (bars("legs", f"{LONG} 1", rows), intervals("price", LONG, rows, "%"), moves("moves", LONG, rows, "%"),
                gap_ladder("gap", LONG, rows[1], [Rung(LONG, -0.5, 0.1, "no")], "%"),
                lines("chances", LONG, [Series(LONG, ((0.0, 1.0), (1.0, 2.0)))], [(0.0, "today")], "%"),
                curve("paid", LONG, [(0.5, 0.0), (150.0, 107.6)], "level", "paid", [(f"{LONG} 60", 60.0)])):
        picture = read(svg)
        assert LONG in picture.findtext(f"{SVG}desc")
        for node in picture.iter(f"{SVG}text"):
            reach = {"start": (0.0, 1.0), "middle": (0.5, 0.5), "end": (1.0, 0.0)}[node.get("text-anchor")]
            x, wide = float(node.get("x")), width(node.text)
            assert x - reach[0] * wide > -1.0 and x + reach[1] * wide < WIDTH + 1.0, node.text


@given(some.lists(some.tuples(some.floats(1.0, 149.0), some.text("abc", min_size=1, max_size=12)), max_size=6))
def test_marks_do_not_cross_names(marked: list[tuple[float, str]]):
    """No line of a mark runs through the name of another: its plate hides none of the names before it."""
    named = [(f"level {name}", place) for place, name in marked]
    picture = read(curve("paid", "0 to 1", [(0.5, 0.0), (150.0, 1.0)], "level", "paid", named))
    plates = [tuple(float(node.get(key)) for key in ("x", "y", "width", "height"))
              for node in picture.iter(f"{SVG}rect")]
    assert len(plates) == len(named)
    for number, (x, y, wide, high) in enumerate(plates):
        for x2, y2, wide2, high2 in plates[number + 1:]:
            apart = x + wide <= x2 + 0.1 or x2 + wide2 <= x + 0.1 or y + high <= y2 + 0.1 or y2 + high2 <= y + 0.1
            assert apart


def test_inks_can_be_read():
    """Contrasts by WCAG 2.1: text 4.5 to its paper, lines and bars 3, on light and on dark paper."""
    def luminance(ink: str) -> float:
        parts = [int(ink[number:number + 2], 16) / 255 for number in (1, 3, 5)]
        linear = [part / 12.92 if part <= 0.04045 else ((part + 0.055) / 1.055) ** 2.4 for part in parts]
        return sum(weight * part for weight, part in zip((0.2126, 0.7152, 0.0722), linear, strict=True))

    def contrast(one: str, other: str) -> float:
        light, dark = sorted((luminance(one), luminance(other)), reverse=True)
        return (light + 0.05) / (dark + 0.05)

    assert contrast("#000000", "#ffffff") == pytest.approx(21.0)
    for side in (LIGHT, DARK):
        inks = {name: both[side] for name, both in INKS.items()}
        for name in ("ink", "soft"):
            assert contrast(inks[name], inks["paper"]) >= 4.5, name
        for name in (*LINES, "fill"):
            assert contrast(inks[name], inks["paper"]) >= 3.0, name
        assert contrast(inks["ink"], inks["fill"]) >= 3.0  # an error over its bar


def test_a_page_takes_its_inks_from_the_palette():
    """No other colour stands in the style of pages."""
    style = resources.files("mcx.report.page").joinpath("page.css").read_text(encoding="utf-8")
    assert not re.findall(r"#[0-9a-fA-F]{3,8}\b|rgb|hsl", style)
    assert set(re.findall(r"var\(--([a-z]+)\)", style)) <= set(INKS)


def test_lines_differ_without_colour():
    """Each has its own dashes and its name at its end."""
    series = [Series(name, ((0.0, 1.0), (1.0, number))) for number, name in enumerate(("up", "flat", "down"))]
    picture = read(lines("chances", "3 lines", series, [(0.0, "today"), (1.0, "1y")], "%"))
    dashes = [node.get("stroke-dasharray") for node in picture.iter(f"{SVG}polyline")]
    assert len(set(dashes)) == 3
    assert {"up", "flat", "down", "today", "1y"} <= {node.text for node in picture.iter(f"{SVG}text")}


def test_nothing_of_a_picture_is_outside():
    """Lines, bands and labels of a fan and a curve stay inside the frame."""
    quantiles = {0.05: (100.0, 40.0), 0.5: (100.0, 90.0), 0.95: (100.0, 230.0)}
    what = Fan("harbour", (0.0, 3.0), quantiles, (Series("a long name of a barrier", ((0.0, 20.0), (3.0, 20.0))),))
    for svg in (fan("fan", "to 230", what, [(0.0, "today"), (3.0, "2029-12-01")], "%"),
                curve("paid", "0 to 1", [(0.5, 0.0), (150.0, 107.6)], "final level", "paid")):
        picture = read(svg)
        height = float(picture.get("height"))
        for node in (*picture.iter(f"{SVG}polyline"), *picture.iter(f"{SVG}polygon")):
            for point in node.get("points").split():
                x, y = map(float, point.split(","))
                assert 0.0 <= x <= WIDTH and 0.0 <= y <= height
        assert all(0.0 <= float(node.get("y")) <= height for node in picture.iter(f"{SVG}text"))


# As files

ROWS = [Bar("a $x$ <b>&", 30.0, 0.5, "30"), Bar("c", -15.0, 0.5, "-15")]
PICTURES = [("first $x$ <b>", bars("first", "30 and -15", ROWS)),
            ("second", curve("second", "0 to 1", [(0.5, 0.0), (150.0, 107.6)], "final level", "paid"))]


def test_a_file_holds_all_pictures():
    """One below the other, none over another, each with its words and title, on paper of its own."""
    root = ElementTree.fromstring(ElementTree.tostring(stacked("note", "99 %", PICTURES)))
    parts = root.findall(f"{SVG}svg")
    assert [part.findtext(f"{SVG}title") for part in parts] == ["first", "second"]
    assert {"note", "99 %", "first $x$ <b>", "second"} <= {node.text for node in root.findall(f"{SVG}text")}
    tops = [(float(part.get("y")), float(part.get("height"))) for part in parts]
    assert tops[0][0] + tops[0][1] < tops[1][0] and sum(tops[1]) <= float(root.get("height"))
    assert root.find(f"{SVG}rect").get("fill") == INKS["paper"][LIGHT]


def test_a_png_has_the_same_shapes(tmp_path: Path):
    """Bars and axes of the SVG are dark where they should be, and what lies beside them is paper."""
    matplotlib = pytest.importorskip("matplotlib.image")
    file = tmp_path / "pictures.png"
    write_pictures(file, "note", "99 %", PICTURES)
    seen = matplotlib.imread(file)
    root = stacked("note", "99 %", PICTURES)
    dots = seen.shape[0] / float(root.get("height"))
    first = root.find("svg")
    for bar in first.iter("rect"):
        x, y = (float(bar.get(side)) + 0.3 * float(bar.get(size)) for side, size in (("x", "width"), ("y", "height")))
        place = int(dots * (y + float(first.get("y")))), int(dots * (x + float(first.get("x"))))
        ink = tuple(int(INKS["fill"][LIGHT][number:number + 2], 16) / 255 for number in (1, 3, 5))
        assert seen[place][:3] == pytest.approx(ink, abs=0.02)
    assert seen[3, 3][:3] == pytest.approx((1.0, 1.0, 1.0))
