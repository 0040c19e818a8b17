"""The page of a result: nothing from outside, text stays text, every picture has its words, what is drawn is right."""

from __future__ import annotations

import json
import math
import re
import subprocess
from html.parser import HTMLParser
from pathlib import Path
from shutil import which
from xml.etree import ElementTree

import numpy as np
import pytest
from front_door import EXAMPLES, mcx, refused, written
from scipy.stats import norm

import mcx as package
from mcx.checked.load import checked_request
from mcx.dates.dating import date_contract
from mcx.estimators.ready import Ready, prepare
from mcx.machine.run import values_by_path
from mcx.report.scene import Scene, scene
from mcx.text.documents import read_documents

NOTE = EXAMPLES / "harbour_lantern.yaml"
CALL = """\
contract: Call
currency: EUR
units: 1
assets: [harbour]
payoff: european
terms: {side: call, strike: 100, expiry: 2y}
---
market: 0y
rates: {EUR: 4%}
assets:
  harbour: {spot: 100, currency: EUR, yield: 1.5%, vol: {value: 22%, uncertain: 1%, source: broker}}
"""
PATHS = ("--paths", 4096)
VERBS = {"price": (NOTE, (), 0), "greeks": (NOTE, ("--ladder",), 0), "verify": (EXAMPLES / "quoted_note.yaml", (), 1)}


class Tags(HTMLParser):
    """The tags of a page with their attributes, and its text."""

    def __init__(self, text: str):
        super().__init__()
        self.tags: list[tuple[str, dict]] = []
        self.texts: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag: str, attrs: list) -> None:
        self.tags.append((tag, dict(attrs)))

    def handle_data(self, data: str) -> None:
        self.texts.append(data)


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """A page of each verb; the quote cannot be explained."""
    folder = tmp_path_factory.mktemp("pages")
    files = {verb: folder / f"{verb}.html" for verb in VERBS}
    for verb, (note, more, code) in VERBS.items():
        assert mcx(verb, note, *PATHS, *more, "--report", files[verb]).code == code
    return files


@pytest.mark.parametrize("verb", VERBS)
def test_a_page_asks_nothing_of_a_network(pages: dict[str, Path], verb: str):
    """No script, no link that loads, no address at all outside a namespace."""
    text = pages[verb].read_text(encoding="utf-8")
    page = Tags(text)
    assert not {tag for tag, _ in page.tags} & {"script", "iframe", "img", "object", "embed", "base"}
    loading = [value for _, attributes in page.tags for key, value in attributes.items()
               if key in ("src", "href", "action") or key.startswith("on")]
    assert loading == ["data:,"]
    assert set(re.findall(r"[a-z]+://[^\"' ]+", text)) == {"http://www.w3.org/2000/svg"}
    assert "url(" not in text and "@import" not in text


@pytest.mark.parametrize("verb", VERBS)
def test_every_picture_has_its_words(pages: dict[str, Path], verb: str):
    """Each is an image with a name, whose description says numbers."""
    found = re.findall(r"<svg.*?</svg>", pages[verb].read_text(encoding="utf-8"), re.DOTALL)
    assert len(found) >= 4
    for text in found:
        picture = ElementTree.fromstring(text)
        assert picture.get("role") == "img"
        title, said = (picture.findtext(f"{{http://www.w3.org/2000/svg}}{tag}") for tag in ("title", "desc"))
        assert title and re.search("[0-9]", said) and picture.get("aria-label") == f"{title}. {said}"


def test_a_page_says_what_the_result_says(pages: dict[str, Path]):
    """The headline, every leg, condition, caution, term and input, the sum of each file, and the command."""
    said = " ".join(Tags(pages["price"].read_text(encoding="utf-8")).texts)
    result = package.price(NOTE, paths=4096)
    for text in (result.contract, *(leg.name for leg in result.legs), *(each.name for each in result.conditions),
                 *result.cautions, *result.limits, "call_barrier", "3m 17%; 1y 18%; 3y 19%",
                 f"mcx price {NOTE} --paths 4096 --seed 1 --reduction none"):
        assert text in said, text
    assert len(set(re.findall(r"\b[0-9a-f]{64}\b", said))) == 2


def test_the_command_finds_the_number_again(pages: dict[str, Path]):
    """What stands under 'to repeat it' gives the same sensitivities, to the last digit."""
    said = " ".join(Tags(pages["greeks"].read_text(encoding="utf-8")).texts)
    command = re.search(r"mcx greeks \S+ (--paths .*?--spot-moves=\S+)", said)[1].split()
    again = mcx("greeks", NOTE, *command, "--json").json
    before = package.greeks(NOTE, paths=4096, spot_moves=again["spot_moves"])
    assert again["greeks"] == before.to_dict()["greeks"] and again["ladder"] == before.to_dict()["ladder"]


def test_markup_in_a_title_stays_text(tmp_path: Path):
    """Nothing in a document can become part of the page."""
    evil = "<script>alert(1)</script><img src=x onerror=alert(2)> {{ 7 * 7 }} & \\\"'"
    text = CALL.replace("Call", f'"{evil}"').replace("broker", '"</td><script>x</script>"')
    for verb in ("price", "greeks"):
        file = tmp_path / f"{verb}.html"
        assert mcx(verb, written(tmp_path, text), *PATHS, "--report", file).code == 0
        page = Tags(file.read_text(encoding="utf-8"))
        assert not [tag for tag, _ in page.tags if tag in ("script", "img")]
        assert any("<script>alert(1)</script>" in said and "{{ 7 * 7 }}" in said for said in page.texts)


def surroundings(file: Path) -> tuple[Ready, Scene]:
    """The first contract of a file, ready to run, and what surrounds its number."""
    documents, faults = read_documents([file])
    made, faults = checked_request(documents, faults)
    dated, wrong = date_contract(made.contracts[0], made.market.valuation)
    ready, refusals = prepare(dated, made.market)
    assert not (faults or wrong or refusals)
    return ready, scene(ready, documents, "mcx price")


def test_quantiles_are_those_of_the_law(tmp_path: Path):
    """The fan of a level without cash dividends: a lognormal with the forward as its mean."""
    fan, = surroundings(written(tmp_path, CALL))[1].fans
    for share, levels in fan.quantiles.items():
        expected = 100 * math.exp((0.04 - 0.015 - 0.5 * 0.22**2) * 2 + norm.ppf(share) * 0.22 * math.sqrt(2))
        assert levels[-1] == pytest.approx(expected, rel=1e-9) and levels[0] == pytest.approx(100)


def test_cash_dividends_are_in_the_quantiles():
    """With cash dividends to come, as many simulated levels lie below a quantile as it says (seed fixed, 4 errors)."""
    ready, found = surroundings(EXAMPLES / "dividends_and_currencies.yaml")
    assert [fan.name for fan in found.fans] == ["quarry", "lantern"]
    levels = dict(zip((output.name for output in ready.unrolled.tape.outputs),
                      values_by_path(ready.program, seed=20261201, paths=20_000), strict=True))
    for name, (asset, time) in ready.unrolled.levels.items():
        fan = found.fans[asset]
        assert time == pytest.approx(fan.times[-1])
        unit = ready.dated.contract.terms["initial"].rows[0][asset] / 100.0
        for share, quantiles in fan.quantiles.items():
            below = np.mean(levels[name] / unit < quantiles[-1])
            assert abs(below - share) < 4 * math.sqrt(share * (1 - share) / 20_000)


def test_the_profile_is_what_the_contract_pays():
    """Straight paths through the demo note: worked by hand from its terms."""
    found = surroundings(NOTE)[1]
    paid = dict(found.profile)
    at = {level: paid[min(paid, key=lambda each: abs(each - level))] for level in (30.0, 59.0, 120.0)}
    assert found.base == "initial"
    assert at[120.0] == pytest.approx(100 + 4 * 1.9)  # called on the first call date, the fourth, with all coupons
    assert 59.0 < at[59.0] < 59.0 + 12 * 1.9  # the worst, and the coupons while it stood above 70 %
    assert at[30.0] < at[59.0]
    lantern = found.fans[1].barriers
    assert {each.name for each in lantern} == {"knock in", "coupon barrier", "call barrier"}
    assert [each.points[-1][1] for each in lantern if each.name == "call barrier"] == [pytest.approx(90.0)]


def test_where_a_page_cannot_be_written(tmp_path: Path):
    """It is said before the work; an old page is replaced."""
    refused(mcx("price", NOTE, *PATHS, "--report", tmp_path / "no" / "page.html"), "there is no folder")
    refused(mcx("price", NOTE, *PATHS, "--report", tmp_path), "this is a folder")
    file = tmp_path / "page.html"
    file.write_text("old", encoding="utf-8")
    assert mcx("price", NOTE, *PATHS, "--report", file).code == 0
    assert file.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")


# In a notebook

def test_results_show_themselves():
    """A price and sensitivities as HTML with pictures; other results leave it to their text."""
    price, greeks = package.price(NOTE, paths=4096), package.greeks(NOTE, paths=4096)
    for result in (price, greeks):
        shown = Tags(result._repr_html_())
        assert result.contract in " ".join(shown.texts) and "svg" in {tag for tag, _ in shown.tags}
        assert not {"html", "body", "script"} & {tag for tag, _ in shown.tags}
    assert package.payoffs()._repr_html_() is None
    assert package.price(EXAMPLES / "autocall.yaml", paths=4096)._repr_html_().count("<article") == 2


def test_rows_of_results():
    """Legs of a price, sensitivities, contracts of a table: what is no list, as plain numbers."""
    price, greeks = package.price(NOTE, paths=4096), package.greeks(NOTE, paths=4096)
    assert price.rows() == [each.to_dict() for each in price.legs]
    assert greeks.rows() == [each.to_dict() for each in greeks.greeks]
    table = package.price(EXAMPLES / "autocall.yaml", paths=4096)
    assert [row["price"] for row in table.rows()] == [each.price for each in table.prices]
    assert not [value for row in table.rows() for value in row.values() if isinstance(value, list | dict)]
    assert json.dumps(table.rows())


def test_frames():
    """A pandas DataFrame of the rows, where pandas is installed."""
    pandas = pytest.importorskip("pandas")
    result = package.price(NOTE, paths=4096)
    frame = result.to_frame()
    assert isinstance(frame, pandas.DataFrame) and list(frame["name"]) == [leg.name for leg in result.legs]
    assert np.isclose(frame["price"].sum(), result.price, rtol=1e-12)


# In a browser

BROWSER = next(filter(None, map(which, ("chromium", "chromium-browser", "google-chrome", "chrome"))), None)


def printed(page: Path, folder: Path) -> tuple[int, list[str]]:
    """How many pages a browser without a screen prints, and what it says on its console."""
    target = folder / "page.pdf"
    done = subprocess.run([BROWSER, "--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage",
                           "--disable-background-networking", "--no-first-run", f"--user-data-dir={folder / 'browser'}",
                           "--enable-logging=stderr", "--host-resolver-rules=MAP * ~NOTFOUND", "--no-pdf-header-footer",
                           f"--print-to-pdf={target}", page.as_uri()], capture_output=True, text=True, timeout=120)
    assert done.returncode == 0, done.stderr
    said = [line for line in done.stderr.splitlines() if ":CONSOLE" in line]
    return len(re.findall(rb"/Type\s*/Page\b", target.read_bytes())), said


@pytest.mark.skipif(BROWSER is None, reason="no browser is installed that runs without a screen")
@pytest.mark.parametrize("verb", VERBS)
def test_in_a_browser(pages: dict[str, Path], verb: str, tmp_path: Path):
    """A page prints to two pages at most and tries nothing that its own policy forbids: no request, no script."""
    count, said = printed(pages[verb], tmp_path)
    assert 1 <= count <= 2 and not said


@pytest.mark.skipif(BROWSER is None, reason="no browser is installed that runs without a screen")
def test_the_policy_of_a_page_is_kept(pages: dict[str, Path], tmp_path: Path):
    """What somebody adds to a page cannot load or run: the browser says so, which the test above would see."""
    text = pages["price"].read_text(encoding="utf-8")
    added = "<img src='http://example.org/x.png'><script>console.log('ran')</script></main>"
    _, said = printed(written(tmp_path, text.replace("</main>", added), "added.html"), tmp_path)
    assert len(said) == 2 and all("Content Security Policy" in line for line in said)
