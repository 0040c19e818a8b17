"""The page of a result: nothing from outside, text stays text, every picture has its words, what is drawn is right."""

from __future__ import annotations

import json
import math
import re
import subprocess
import sys
from dataclasses import dataclass
from html import unescape
from html.parser import HTMLParser
from itertools import combinations
from pathlib import Path
from shutil import which
from xml.etree import ElementTree

import numpy as np
import pytest
from front_door import EXAMPLES, mcx, refused, written
from scipy.stats import norm

import mcx as package
from mcx.api.request import made_ready, read_request, sources
from mcx.estimators.ready import Ready
from mcx.machine.run import values_by_path
from mcx.report.scene import Scene, scene

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
EXCHANGE = """\
contract: Exchange
currency: EUR
units: 1
assets: [harbour, lantern]
payoff: exchange_option
terms: {receive: harbour, give: lantern, receive_units: 1, give_units: 1, expiry: 1y}
---
market: 0y
rates: {EUR: 2%}
assets:
  harbour: {spot: 100, yield: 0%, vol: 20%}
  lantern: {spot: 100, yield: 0%, vol: 20%}
correlation: {harbour/lantern: 50%}
uncertainty: {vol: 1%, correlation: 10%}
---
quote: Saltmarsh dealing desk
at: 0y
side: mid
unit: per unit
price: 40
accrual: dirty
commitment: indicative
"""
ALL = [*sorted(EXAMPLES.glob("*.yaml")), *sorted((Path(__file__).parents[1] / "corners").glob("*.yaml"))]
PATHS = ("--paths", 4096)
SVG = "{http://www.w3.org/2000/svg}"
QUOTED = EXAMPLES / "quoted_note.yaml"
VERBS = {"price": (NOTE, (*PATHS,), 0), "greeks": (NOTE, (*PATHS, "--ladder"), 0), "verify": (QUOTED, (*PATHS,), 1),
         "methods": (NOTE, ("--paths", 4096), 0)}


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

    @property
    def said(self) -> str:
        return " ".join(" ".join(self.texts).split())


@pytest.fixture(scope="module")
def pages(tmp_path_factory: pytest.TempPathFactory) -> dict[str, Path]:
    """A page of each verb; the quote cannot be explained."""
    folder = tmp_path_factory.mktemp("pages")
    files = {verb: folder / f"{verb}.html" for verb in VERBS}
    for verb, (note, more, code) in VERBS.items():
        assert mcx(verb, note, *more, "--report", files[verb]).code == code
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
    assert len(found) >= {"methods": 1, "greeks": 3}.get(verb, 4)
    for text in found:
        picture = ElementTree.fromstring(text)
        assert picture.get("role") == "img"
        title, said = (picture.findtext(f"{{http://www.w3.org/2000/svg}}{tag}") for tag in ("title", "desc"))
        assert title and re.search("[0-9]", said) and picture.get("aria-label") == f"{title}. {said}"


def test_a_page_says_what_the_result_says(pages: dict[str, Path]):
    """The headline, every leg, condition, caution, term and input, the sum of each file, and the command."""
    said = Tags(pages["price"].read_text(encoding="utf-8")).said
    result = package.price(NOTE, paths=4096)
    for text in (result.contract, *(leg.name for leg in result.legs), *(each.name for each in result.conditions),
                 *result.cautions, *result.limits, "call_barrier", "3m 17%, 1y 18%, 3y 19%",
                 f"mcx price {NOTE} --paths 4096 --seed 1 --reduction none"):
        assert text in said, text
    assert len(set(re.findall(r"\b[0-9a-f]{64}\b", said))) == 2


def test_readings_on_the_page_are_those_that_differ(pages: dict[str, Path]):
    """Prices of readings are on other paths than the contract's: beside each stands its difference."""
    readings = section(pages["verify"], "other readings of the contract")
    assert "difference" in readings
    assert "knock-in at each close" in readings
    assert "knock-in level of the strike" not in readings  # the strike is the initial level


def test_an_input_that_cannot_meet_the_quote(tmp_path: Path):
    """The range that was looked through is no move, and too wide for a column of a printed page."""
    files = written(tmp_path, EXCHANGE)
    assert mcx("verify", files, *PATHS, "--report", tmp_path / "page.html").code == 1
    found = section(tmp_path / "page.html", "what would have to be true, each input alone")
    assert "correlation harbour/lantern none" in found
    assert re.search(r"correlation harbour/lantern: no move from -[0-9.]+ % to \+[0-9.]+ % meets the quote", found)


def section(page: Path, title: str) -> str:
    """The text of one section of a page."""
    text = page.read_text(encoding="utf-8")
    start = text.index(f"<h3>{title}</h3>")
    return Tags(text[start : text.index("</section>", start)]).said


def test_the_command_finds_the_number_again(pages: dict[str, Path]):
    """What stands under 'to repeat it' gives the same sensitivities, to the last digit."""
    said = Tags(pages["greeks"].read_text(encoding="utf-8")).said
    command = re.search(r"mcx greeks \S+ (--paths .*?--spot-moves=\S+)", said)[1].split()
    again = mcx("greeks", NOTE, *command, "--json").json
    before = package.greeks(NOTE, paths=4096, spot_moves=again["spot_moves"])
    assert again["greeks"] == before.to_dict()["greeks"] and again["ladder"] == before.to_dict()["ladder"]


EVIL = "<script>alert(1)</script><img src=x onerror=alert(2)> {{ 7 * 7 }} ]]> --> & ' $x$"


def stays_text(file: Path) -> None:
    """No tag comes of EVIL, in the page or inside a picture, and it stands there letter by letter."""
    text = file.read_text(encoding="utf-8")
    page = Tags(text)
    assert not [tag for tag, _ in page.tags if tag in ("script", "img")]
    assert not [key for _, attributes in page.tags for key in attributes if key.startswith("on")]
    assert "<script>alert(1)</script>" in page.said and "{{ 7 * 7 }}" in page.said
    for svg in re.findall(r"<svg.*?</svg>", text, re.DOTALL):
        assert {node.tag.split("}")[1] for node in ElementTree.fromstring(svg).iter()} <= {
            "svg", "title", "desc", "text", "line", "rect", "circle", "polyline", "polygon"}


def test_markup_in_a_contract_stays_text(tmp_path: Path):
    """A title, a source and a leg's name cannot become part of the page."""
    text = CALL.replace("Call", json.dumps(EVIL)).replace("broker", '"</td><script>x</script>"')
    for verb in ("price", "greeks", "methods"):
        file = tmp_path / f"{verb}.html"
        assert mcx(verb, written(tmp_path, text), *PATHS, "--report", file).code == 0
        stays_text(file)


def test_markup_in_a_quote_stays_text(tmp_path: Path):
    """A dealer, a source and the names of conditions and parts, which stand in pictures too."""
    text = QUOTED.read_text(encoding="utf-8").replace("Saltmarsh dealing desk", json.dumps(EVIL))
    text = text.replace("two brokers", json.dumps("</title></svg><script>alert(1)</script>"))
    note = written(tmp_path, text.replace("payoff: barrier_reverse_convertible", "payoff: mine"), "note.yaml")
    shipped = package.definition("barrier_reverse_convertible").text
    mine = shipped.replace("payoff: barrier_reverse_convertible", "payoff: mine").replace(
        "as: capital at risk", f"as: {json.dumps('</title><script>alert(1)</script>')}")
    assert mine.count("alert(1)") > 1
    file, picture = tmp_path / "verify.html", tmp_path / "verify.svg"
    found = mcx("verify", note, written(tmp_path, mine, "mine.yaml"), *PATHS, "--report", file, "--picture", picture)
    assert found.code == 1, found.err
    stays_text(file)
    assert ElementTree.parse(picture).findtext(f"{SVG}title")


def surroundings(file: Path) -> tuple[Ready, Scene]:
    """The first contract of a file, ready to run, and what surrounds its number."""
    made, dated = read_request([file], with_market=True)
    ready = next(iter(made_ready(made, dated)))
    return ready, scene(ready, sources(made), "mcx price")


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


@pytest.mark.parametrize("file", ALL, ids=lambda file: file.stem)
def test_every_example_has_surroundings(file: Path):
    """Each shipped contract and each of the grammar's corners: finite numbers in order, for a page."""
    made, dated = read_request([file, *file.parent.glob(f"{file.stem}.csv")], with_market=True)
    for ready in made_ready(made, dated):
        found = scene(ready, sources(made), "mcx price")
        assert np.isfinite(np.array(found.profile)).all() and (found.profile or ready.dated.last.time <= 0.0)
        for fan in found.fans:
            quantiles = np.array([fan.quantiles[share] for share in sorted(fan.quantiles)])
            assert np.isfinite(quantiles).all() and (np.diff(quantiles, axis=0) >= 0.0).all()
            assert all(np.isfinite(np.array(line.points)).all() for line in fan.barriers)


HIT = """\
contract: Hit
currency: EUR
units: 1
assets: [harbour]
payoff: mine
terms: {barrier: 120, watched: {continuous: [0y, 2y]}}
---
payoff: mine
about: Pays the years until a level is reached.
assets: 1
pays: money per unit
terms:
  barrier: {type: level}
  watched: {type: watch}
running:
  touched: {ever: spot >= barrier, at: watched}
events:
  - {at: {once: touched}, pay: years}
---
"""


def test_the_moment_of_a_hit_on_a_straight_line(tmp_path: Path):
    """A line in logs that ends beyond a barrier is there in proportion; one that ends before it pays nothing."""
    _, found = surroundings(written(tmp_path, HIT + CALL.split("---\n")[1]))
    for final, years in found.profile:
        expected = 2 * math.log(1.2) / math.log(final / 100) if final >= 120 else 0.0
        assert years == pytest.approx(expected, abs=1e-9)


def test_many_assets_and_dates(tmp_path: Path):
    """A basket of 12 assets that is averaged over 80 days, under a long title: three fans, the others by name."""
    names = [f"asset_{number:02d}" for number in range(12)]
    title = "Ein sehr langer Titel mit Ümlauten, 長い題名 und allem, was dazu gehört, " * 3
    contract = {"contract": title, "currency": "EUR", "units": 1, "assets": names, "payoff": "mine",
                "terms": {"strike": 100, "days": {"count": 80, "until": "1y"}, "expiry": "1y"}}
    text = f"""{json.dumps(contract, ensure_ascii=False)}
---
payoff: mine
about: A call on the average.
assets: 1 or more
pays: money per unit
terms:
  strike: {{type: number}}
  days: {{type: dates}}
  expiry: {{type: date}}
running:
  level: {{average: mean(spot), at: days}}
events:
  - {{at: expiry, pay: "max(level - strike, 0)"}}
---
market: 0y
rates: {{EUR: 4%}}
assets: {{{", ".join(f"{name}: {{spot: 100, currency: EUR, yield: 1%, vol: 20%}}" for name in names)}}}
correlation: {{{", ".join(f"{one}/{other}: 50%" for one, other in combinations(names, 2))}}}
"""
    file = tmp_path / "page.html"
    found = mcx("price", written(tmp_path, text), *PATHS, "--report", file, "--picture", tmp_path / "page.png")
    assert found.code == 0, found.err
    page = Tags(file.read_text(encoding="utf-8"))
    assert title.strip() in page.said and "asset_11" in page.said
    assert sum(tag == "svg" for tag, _ in page.tags) >= 5


def test_where_a_page_cannot_be_written(tmp_path: Path):
    """It is said before the work; an old page is replaced."""
    refused(mcx("price", NOTE, *PATHS, "--report", tmp_path / "no" / "page.html"), "there is no folder")
    refused(mcx("price", NOTE, *PATHS, "--report", tmp_path), "this is a folder")
    file = tmp_path / "page.html"
    file.write_text("old", encoding="utf-8")
    assert mcx("price", NOTE, *PATHS, "--report", file).code == 0
    assert file.read_text(encoding="utf-8").startswith("<!DOCTYPE html>")


# Pictures as files

@pytest.mark.parametrize("verb", VERBS)
def test_a_picture_file_has_the_pictures_of_the_page(pages: dict[str, Path], verb: str, tmp_path: Path):
    """The same titles in the same order, and the same words and shapes but for the time that a run took."""
    note, more, code = VERBS[verb]
    file = tmp_path / "pictures.svg"
    assert mcx(verb, note, *more, "--picture", file).code == code
    parts = ElementTree.parse(file).getroot().findall(f"{SVG}svg")
    shown = [ElementTree.fromstring(svg) for svg in
             re.findall(r"<svg.*?</svg>", pages[verb].read_text(encoding="utf-8"), re.DOTALL)]
    assert [part.findtext(f"{SVG}title") for part in parts] == [each.findtext(f"{SVG}title") for each in shown]
    for part, each in zip(parts, shown, strict=True) if verb != "methods" else ():
        assert part.findtext(f"{SVG}desc") == each.findtext(f"{SVG}desc")
        assert [node.attrib for node in list(part)[2:]] == [node.attrib for node in list(each)[2:]]


def test_where_pictures_cannot_be_drawn(tmp_path: Path, monkeypatch: pytest.MonkeyPatch):
    """Said before the work, with nothing written: another suffix, no folder, a folder, several contracts, no
    matplotlib for .png, which .svg does without."""
    for verb, (note, more, code) in VERBS.items():
        refused(mcx(verb, note, *more, "--picture", tmp_path / "a.pdf"), ".png or .svg, by the suffix")
        refused(mcx(verb, note, *more, "--picture", tmp_path / "no" / "a.svg"), "there is no folder")
        (tmp_path / "folder.svg").mkdir(exist_ok=True)
        refused(mcx(verb, note, *more, "--picture", tmp_path / "folder.svg"), "this is a folder")
    refused(mcx("price", EXAMPLES / "autocall.yaml", *PATHS, "--picture", tmp_path / "a.svg"),
            "a picture shows one contract; the files hold 2")
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    refused(mcx("price", NOTE, *PATHS, "--picture", tmp_path / "a.png"), "needs the package 'matplotlib'")
    assert not [file for file in tmp_path.rglob("*") if file.is_file()]
    assert mcx("price", NOTE, *PATHS, "--picture", tmp_path / "a.svg").code == 0


def test_several_contracts_have_their_answers_first(tmp_path: Path):
    """One table with every contract and its answer, then a sheet for each."""
    file = tmp_path / "page.html"
    table = package.price(EXAMPLES / "autocall.yaml", paths=4096, report=file)
    text = file.read_text(encoding="utf-8")
    overview = text[text.index('class="overview"'):text.index("<article")]
    assert all(each.contract in overview for each in table.prices) and overview.count("±") == 2
    assert text.count("<article") == 2


# In a notebook

def test_results_show_themselves():
    """Prices, sensitivities, verdicts and comparisons as HTML with pictures; other results leave it to their text."""
    results = (package.price(NOTE, paths=4096), package.greeks(NOTE, paths=4096), package.verify(QUOTED, paths=4096),
               package.methods(NOTE, paths=4096))
    for result in results:
        shown = Tags(result._repr_html_())
        assert result.contract in " ".join(shown.texts) and "svg" in {tag for tag, _ in shown.tags}
        assert not {"html", "body", "script"} & {tag for tag, _ in shown.tags}
    for result in (package.payoffs(), package.readback(NOTE), package.readback(NOTE, calendar=True),
                   results[0].legs[0]):
        assert result._repr_html_() is None and repr(result)
    assert package.price(EXAMPLES / "autocall.yaml", paths=4096)._repr_html_().count("<article") == 2


def test_rows_of_results():
    """Legs of a price, sensitivities, contracts of a table: what is no list, as plain numbers."""
    price, greeks = package.price(NOTE, paths=4096), package.greeks(NOTE, paths=4096)
    assert price.rows() == [each.to_dict() for each in price.legs]
    said = [each.to_dict() for each in greeks.greeks]
    assert greeks.rows() == [{key: value for key, value in row.items() if key != "interval95"} for row in said]
    table = package.price(EXAMPLES / "autocall.yaml", paths=4096)
    assert [row["price"] for row in table.rows()] == [each.price for each in table.prices]
    assert not [value for row in table.rows() for value in row.values() if isinstance(value, list | dict)]
    assert json.dumps(table.rows())


def test_a_frame_without_pandas(monkeypatch: pytest.MonkeyPatch):
    """It says what is missing, and that the same rows can be had without it."""
    monkeypatch.setitem(sys.modules, "pandas", None)
    with pytest.raises(ImportError, match=r"needs the package 'pandas', which is not installed; rows\(\) gives"):
        package.payoffs().to_frame()


def test_frames():
    """A pandas DataFrame of the rows, where pandas is installed."""
    pandas = pytest.importorskip("pandas")
    result = package.price(NOTE, paths=4096)
    frame = result.to_frame()
    assert isinstance(frame, pandas.DataFrame) and list(frame["name"]) == [leg.name for leg in result.legs]
    assert np.isclose(frame["price"].sum(), result.price, rtol=1e-12)


# In a browser

BROWSER = next(filter(None, map(which, ("chromium", "chromium-browser", "google-chrome", "chrome"))), None)
needs_browser = pytest.mark.skipif(BROWSER is None, reason="no browser is installed that runs without a screen")
DARK = "--blink-settings=preferredColorScheme=0"


@dataclass(frozen=True)
class Seen:
    """What a browser did with a page: printed pages, lines on its console, addresses that the page asked for."""

    pages: int
    console: tuple[str, ...]
    asked: frozenset[str]


def browse(page: Path, folder: Path, *more: str) -> subprocess.CompletedProcess:
    """A browser without a screen, whose every name leads nowhere."""
    done = subprocess.run([BROWSER, "--headless", "--no-sandbox", "--disable-gpu", "--disable-dev-shm-usage",
                           "--disable-background-networking", "--no-first-run", f"--user-data-dir={folder / 'browser'}",
                           "--host-resolver-rules=MAP * ~NOTFOUND", *more, page.as_uri()],
                          capture_output=True, text=True, timeout=120)
    assert done.returncode == 0, done.stderr
    return done


def printed(page: Path, folder: Path) -> Seen:
    """Prints a page on A4, with the browser's own log of its network."""
    target, log = folder / "page.pdf", folder / "net.json"
    done = browse(page, folder, "--enable-logging=stderr", "--no-pdf-header-footer", f"--print-to-pdf={target}",
                  f"--log-net-log={log}")
    of_page = r'"initiator":"(?!not an origin)[^"]*".*?"url":"((?!file:|data:)[^"]+)"'  # the others are the browser's
    asked = frozenset(re.findall(of_page, log.read_text(encoding="utf-8", errors="replace")))
    return Seen(len(re.findall(rb"/Type\s*/Page\b", target.read_bytes())),
                tuple(line for line in done.stderr.splitlines() if ":CONSOLE" in line), asked)


@needs_browser
@pytest.mark.parametrize("verb", VERBS)
def test_in_a_browser(pages: dict[str, Path], verb: str, tmp_path: Path):
    """A page prints to two pages at most and tries nothing that its own policy forbids; no request leaves."""
    seen = printed(pages[verb], tmp_path)
    assert 1 <= seen.pages <= 2 and not seen.console and not seen.asked


@needs_browser
def test_what_a_page_asks_for_would_be_seen(pages: dict[str, Path], tmp_path: Path):
    """What somebody adds to a page cannot load or run: the browser says so. Without its policy the request leaves,
    which the log shows."""
    text = pages["price"].read_text(encoding="utf-8")
    added = "<img src='http://example.org/x.png'><script>console.log('ran')</script></main>"
    seen = printed(written(tmp_path, text.replace("</main>", added), "added.html"), tmp_path)
    assert len(seen.console) == 2 and all("Content Security Policy" in line for line in seen.console)
    assert not [each for each in seen.asked if "example.org" in each]
    bare = re.sub("<meta http-equiv[^>]*>", "", text.replace("</main>", added))
    assert "http://example.org/x.png" in printed(written(tmp_path, bare, "bare.html"), tmp_path).asked


AS_PRINTED = 718  # a window as wide as a printed page of A4 between its margins
MEASURE = """<script>
const found = [];
for (const svg of document.querySelectorAll('svg')) {
  const frame = svg.getBoundingClientRect(), title = svg.querySelector('title').textContent;
  const texts = [...svg.querySelectorAll('text')].map(node => [node.textContent, node.getBoundingClientRect()]);
  texts.forEach(([words, box], number) => {
    if (box.left < frame.left - 2 || box.right > frame.right + 2 || box.top < frame.top - 3
        || box.bottom > frame.bottom + 3) found.push(`${title}: '${words}' is cut`);
    for (const [other, there] of texts.slice(number + 1))
      if (box.left < there.right - 1 && there.left < box.right - 1 && box.top + 3 < there.bottom - 3
          && there.top + 3 < box.bottom - 3) found.push(`${title}: '${words}' runs into '${other}'`);
  });
}
for (const section of document.querySelectorAll('section')) {
  const end = section.getBoundingClientRect().right, table = section.querySelector('table');
  if (table && getComputedStyle(section).overflowX == 'visible' && table.getBoundingClientRect().right > end + 1)
    found.push(`${section.querySelector('h3')?.textContent}: the table is wider than its column`);
}
const page = document.documentElement;
if (page.scrollWidth > innerWidth + 1) found.push(`the page is ${page.scrollWidth} wide, the window ${innerWidth}`);
const style = getComputedStyle(document.body);
document.title = JSON.stringify({found, ink: style.color, paper: style.backgroundColor});
</script></body>"""


def measured(page: Path, folder: Path, width: int, *more: str) -> dict:
    """Where words of pictures meet or are cut and tables leave their column, and the inks, as a browser lays a page out
    in a window, or on paper."""
    text = re.sub("<meta http-equiv[^>]*>", "", page.read_text(encoding="utf-8")).replace("</body>", MEASURE)
    if width == AS_PRINTED:
        text = text.replace("@media screen", "@media not all").replace("@media print", "@media all")
    done = browse(written(folder, text, "measured.html"), folder, f"--window-size={width},900", "--dump-dom", *more)
    return json.loads(unescape(re.search("<title>(.*?)</title>", done.stdout, re.DOTALL)[1]))


@needs_browser
@pytest.mark.parametrize("verb", VERBS)
def test_words_do_not_meet(pages: dict[str, Path], verb: str, tmp_path: Path):
    """On a desk and on a telephone; light paper and, for who asks for it, dark paper."""
    light, dark = measured(pages[verb], tmp_path, 1280), measured(pages[verb], tmp_path, 500, DARK)
    assert light == {"found": [], "ink": "rgb(26, 26, 26)", "paper": "rgb(255, 255, 255)"}
    assert dark == {"found": [], "ink": "rgb(236, 236, 236)", "paper": "rgb(22, 22, 22)"}


@needs_browser
@pytest.mark.parametrize("verb", VERBS)
def test_tables_keep_to_their_column_on_paper(pages: dict[str, Path], verb: str, tmp_path: Path):
    assert measured(pages[verb], tmp_path, AS_PRINTED)["found"] == []


@needs_browser
def test_inputs_that_cannot_meet_a_quote_on_paper(tmp_path: Path):
    """Of two assets, which have pairs with long names and a range for each; and what a wider row would do is seen."""
    page = tmp_path / "page.html"
    assert mcx("verify", written(tmp_path, EXCHANGE), *PATHS, "--report", page).code == 1
    assert 1 <= printed(page, tmp_path).pages <= 2
    for width in (1280, 500, AS_PRINTED):
        assert measured(page, tmp_path, width)["found"] == []
    text = page.read_text(encoding="utf-8")
    start = text.index("correlation harbour/lantern</td>")
    wide = text[start:].replace("<td></td>", f"<td>{4 * '-1,234.5 % to '}</td>", 1)
    found = measured(written(tmp_path, text[:start] + wide, "wide.html"), tmp_path, AS_PRINTED)["found"]
    assert found == ["what would have to be true, each input alone: the table is wider than its column"]


@needs_browser
def test_words_that_meet_would_be_seen(pages: dict[str, Path], tmp_path: Path):
    """A word that is laid over another, and one beyond the picture's edge."""
    text = pages["price"].read_text(encoding="utf-8")
    added = '<text x="5" y="30">over</text><text x="5" y="30">another</text><text x="399" y="90">beyond</text></svg>'
    found = measured(written(tmp_path, text.replace("</svg>", added, 1), "added.html"), tmp_path, 1280)["found"]
    for said in ("'over' runs into 'another'", "'beyond' is cut"):
        assert any(said in line for line in found)
