"""Pictures: places on a scale are where the numbers say, axes are round, labels do not meet, nothing is cut off."""

from __future__ import annotations

from xml.etree import ElementTree

import pytest
from hypothesis import given
from hypothesis import strategies as some

from mcx.report.pictures.canvas import ROW, Canvas, Scale, scale
from mcx.report.pictures.draw import WIDTH, Bar, Fan, Series, bars, curve, fan, gap_ladder, intervals, lines

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


def test_ticks_are_round():
    assert Scale(97.3, 104.2, 0, 1).ticks() == [98, 100, 102, 104]
    assert Scale(0.0, 0.03, 0, 1).ticks() == pytest.approx([0.0, 0.01, 0.02, 0.03])


@given(some.lists(some.floats(0.0, 200.0), min_size=1, max_size=8))
def test_labels_do_not_meet(wanted: list[float]):
    """However near their lines end, labels are a row apart and keep the lines' order."""
    canvas = Canvas(100, 200, "labels", "8 of them")
    canvas.labels(0.0, [(place, str(number)) for number, place in enumerate(wanted)], 10.0, 190.0)
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
    picture = read(intervals("price", "50 and 51", rows))
    spans = [float(node.get("x2")) - float(node.get("x1")) for node in picture.iter(f"{SVG}line")
             if node.get("class") == "error" and node.get("y1") == node.get("y2")]
    assert spans[0] == pytest.approx(2 * spans[1], abs=0.03)
    dots = [float(node.get("cx")) for node in picture.iter(f"{SVG}circle")]
    assert spans[1] / (dots[1] - dots[0]) == pytest.approx(2 * 1.96, rel=2e-3)


def test_a_gap_stands_beside_its_bands():
    """The dashed line of the gap runs through a band that holds it, and beside one that does not."""
    bands = [("wide", 0.8, "yes"), ("small", 0.2, "no")]
    picture = read(gap_ladder("gap", "-0.5", Bar("gap", -0.5, 0.01, "-0.5"), bands))
    end = float(picture.find(f"{SVG}polyline").get("points").split(",")[0])
    spans = [(float(node.get("x1")), float(node.get("x2"))) for node in picture.iter(f"{SVG}line")
             if node.get("class") == "error" and node.get("y1") == node.get("y2")]
    assert [low < end < high for low, high in spans] == [True, False, True]  # the bands, then the gap's own error


def test_lines_differ_without_colour():
    """Each has its own dashes and its name at its end."""
    series = [Series(name, ((0.0, 1.0), (1.0, number))) for number, name in enumerate(("up", "flat", "down"))]
    picture = read(lines("chances", "3 lines", series, [(0.0, "today"), (1.0, "1y")]))
    dashes = [node.get("stroke-dasharray") for node in picture.iter(f"{SVG}polyline")]
    assert len(set(dashes)) == 3
    assert {"up", "flat", "down", "today", "1y"} <= {node.text for node in picture.iter(f"{SVG}text")}


def test_nothing_of_a_picture_is_outside():
    """Lines, bands and labels of a fan and a curve stay inside the frame."""
    quantiles = {0.05: (100.0, 40.0), 0.5: (100.0, 90.0), 0.95: (100.0, 230.0)}
    what = Fan("harbour", (0.0, 3.0), quantiles, (Series("a long name of a barrier", ((0.0, 20.0), (3.0, 20.0))),))
    for svg in (fan("fan", "to 230", what, [(0.0, "today"), (3.0, "2029-12-01")]),
                curve("paid", "0 to 1", [(0.5, 0.0), (150.0, 107.6)], "final level", "paid")):
        picture = read(svg)
        height = float(picture.get("height"))
        for node in (*picture.iter(f"{SVG}polyline"), *picture.iter(f"{SVG}polygon")):
            for point in node.get("points").split():
                x, y = map(float, point.split(","))
                assert 0.0 <= x <= WIDTH and 0.0 <= y <= height
        assert all(0.0 <= float(node.get("y")) <= height for node in picture.iter(f"{SVG}text"))
