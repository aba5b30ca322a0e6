"""The report: one file, the answer in it, nothing of the catalogue's own markup alive."""

from __future__ import annotations

import itertools
import re
import sys
import tomllib
from html.parser import HTMLParser
from pathlib import Path

import numpy as np
import pytest
from browser import chromium

import embersift
from embersift.errors import OutputError
from embersift.mock import population
from embersift.tables import Provenance

pytest.importorskip("jinja2", reason="the extra report is not installed")
pytest.importorskip("matplotlib", reason="the extra figures is not installed")

from embersift.report import ReportMissing, laws_in_use, report

RECIPE = embersift.Recipe.from_dict(
    {"observation": [{"name": "deep", "band": [0.5, 2.0], "flux_limit": 1e-16}]}
)
EVIL = '"><script>alert(1)</script><img src=http://example.org/x onerror=alert(1)>&amp;'

needs_chromium = pytest.mark.skipif(not chromium.CHROMIUM.exists(), reason=chromium.MISSING)


class _Page(HTMLParser):
    """Tags with their attributes, the text of each heading, and all text."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.tags: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []
        self.open: list[str] = []
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.open.append(tag)

    def handle_endtag(self, tag):
        if tag in self.open:
            while self.open.pop() != tag:
                pass

    def handle_data(self, data):
        if "style" not in self.open:
            self.text.append(data)

    @property
    def words(self) -> str:
        return re.sub(r"\s+", " ", "".join(self.text))


@pytest.fixture(scope="module")
def screened():
    table = population(700, seed=5)
    table.loc[:, "id"] = [f"{EVIL}{i}" for i in range(len(table))]
    return embersift.screen(table, RECIPE)


@pytest.fixture(scope="module")
def page(screened, tmp_path_factory) -> Path:
    origin = Provenance("0.1.0", "", (), invented="an invented population")
    out = tmp_path_factory.mktemp("report") / "report.html"
    return report(screened, RECIPE, origin, out, title=f"tern {EVIL}.ecsv")


@pytest.fixture(scope="module")
def parsed(page) -> _Page:
    return _Page(page.read_text(encoding="utf-8"))


def test_markup_in_ids_and_titles_stays_text(page, parsed):
    # oracle: the HTML parser of the standard library finds no element that the catalogue smuggled
    assert not [tag for tag, _ in parsed.tags if tag in ("script", "img", "iframe", "object")]
    assert not [a for _, attrs in parsed.tags for a in attrs if a.startswith("on")]
    assert EVIL in "".join(parsed.text)
    assert "<script" not in page.read_text(encoding="utf-8").lower()


def test_the_file_needs_nothing_but_itself(page, parsed):
    for tag, attrs in parsed.tags:
        for name, value in attrs.items():
            if name in ("src", "srcset", "data", "poster", "action") or (
                name in ("href", "xlink:href") and tag not in ("a",)
            ):
                assert str(value).startswith("#"), (tag, name, value)
            if name == "style":
                assert "url(" not in str(value).replace("url(#", "")
    text = page.read_text(encoding="utf-8")
    assert "@import" not in text
    assert not [tag for tag, _ in parsed.tags if tag in ("link", "base")]


def test_the_policy_allows_inline_style_alone(parsed):
    (policy,) = [
        attrs["content"]
        for tag, attrs in parsed.tags
        if tag == "meta" and attrs.get("http-equiv") == "Content-Security-Policy"
    ]
    rules = dict(rule.strip().split(" ", 1) for rule in policy.split(";"))
    assert rules.pop("default-src") == "'none'"
    assert rules.pop("style-src") == "'unsafe-inline'"
    assert set(rules.values()) == {"'none'"}


def test_the_answer_is_the_tally(screened, parsed):
    # oracle: counted from the fates by hand
    fates = screened["fate_deep_2"].astype(str)
    holes = (~fates.isin(["unusable", "no_black_hole"])).sum()
    visible = (fates == "visible").sum()
    words = parsed.words
    share = 100.0 * (holes - visible) / holes
    assert f"Of {holes} black holes, {visible} are visible and {share:.1f} % stay hidden" in words
    most = fates[~fates.isin(["unusable", "no_black_hole", "visible"])].value_counts()
    assert f"Why they are hidden: {most.index[0]} (" in words


def test_cautions_count_what_the_columns_say(screened, parsed):
    stretched = screened["stretched"].astype(str)
    for law in {name for text in stretched.unique() for name in text.split("|") if name}:
        rows = stretched.str.split("|").apply(lambda words, law=law: law in words).sum()
        assert f"{law} was stretched for {rows} of 700 rows" in parsed.words
    blank = screened["oh12"].isna().sum()
    assert f"{blank} rows of 700 without a metallicity" in parsed.words
    assert "from lehmer2019 instead of lehmer2021" in parsed.words
    assert "sfr: missing:" in parsed.words or "redshift: zero" in parsed.words


def test_every_law_in_use_stands_with_source_and_bibtex(parsed):
    laws = laws_in_use(RECIPE)
    assert [law.name for _, law in laws][:2] == ["two-regime", "duras2020"]
    for _, law in laws:
        assert law.name in parsed.words
        assert law.source.citation in parsed.words
    assert "@article{" in parsed.words


def test_the_recipe_in_the_report_reads_back(page):
    import html

    blocks = re.findall(r"<pre>(.*?)</pre>", page.read_text(encoding="utf-8"), flags=re.DOTALL)
    assert embersift.Recipe.from_dict(tomllib.loads(html.unescape(blocks[-1]))) == RECIPE


def test_rows_near_a_criterion_are_the_nearest(screened, page):
    text = page.read_text(encoding="utf-8")
    part = text[text.index("Flux limit of deep") :]
    first = re.search(r"</td><td>([\d,]+)</td>", part)
    seen = ~screened["fate_deep_2"].astype(str).isin(["unusable", "no_black_hole", "dormant"])
    flux = screened["flux_agn_deep"].where(seen)
    with np.errstate(divide="ignore"):
        nearest = int(np.abs(np.log10(flux / 1e-16)).idxmin())
    assert int(first[1].replace(",", "")) == nearest + 1


def test_figures_have_a_name_and_words_for_those_who_cannot_see_them(parsed):
    ids = [attrs["id"] for _, attrs in parsed.tags if "id" in attrs]
    assert len(ids) == len(set(ids))
    drawings = [attrs for tag, attrs in parsed.tags if tag == "svg"]
    assert len(drawings) == 7
    for attrs in drawings:
        assert attrs["role"] == "img"
        assert attrs["aria-labelledby"] in ids
        assert attrs["aria-describedby"] in ids


def test_references_inside_drawings_find_their_target(page, parsed):
    ids = {attrs["id"] for _, attrs in parsed.tags if "id" in attrs}
    text = page.read_text(encoding="utf-8")
    assert set(re.findall(r"url\(#([^)]+)\)", text)) <= ids
    assert set(re.findall(r'xlink:href="#([^"]+)"', text)) <= ids


def test_headings_go_down_one_level_at_a_time(parsed):
    levels = [int(tag[1]) for tag, _ in parsed.tags if re.fullmatch(r"h[1-6]", tag)]
    assert levels[0] == 1
    assert levels.count(1) == 1
    assert all(b - a <= 1 for a, b in itertools.pairwise(levels))


def test_the_same_table_gives_the_same_bytes(screened, page, tmp_path):
    origin = Provenance("0.1.0", "", (), invented="an invented population")
    again = report(screened, RECIPE, origin, tmp_path / "r.html", title=f"tern {EVIL}.ecsv")
    assert again.read_bytes() == page.read_bytes()


def test_an_existing_report_is_not_replaced_unasked(screened, tmp_path):
    out = tmp_path / "report.html"
    out.write_text("mine")
    with pytest.raises(OutputError, match="overwrite"):
        report(screened, RECIPE, None, out)
    assert out.read_text() == "mine"


def test_without_jinja_the_message_says_what_to_install(screened, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "jinja2", None)
    with pytest.raises(ReportMissing, match=r"pip install 'embersift\[report\]'"):
        report(screened, RECIPE, None, tmp_path / "r.html")


def test_a_table_without_a_black_hole_is_reported_as_such(tmp_path):
    table = population(50, seed=1).assign(mbh=0.0, mdot=0.0)
    out = report(embersift.screen(table, RECIPE), RECIPE, None, tmp_path / "r.html")
    assert "There is no black hole in the table" in out.read_text(encoding="utf-8")


@pytest.mark.parametrize("ending", ["csv", "ecsv", "fits", "parquet"])
def test_a_screened_file_gives_the_same_numbers_as_memory(screened, parsed, tmp_path, ending):
    from embersift.tables import read_table, write_table

    path = tmp_path / f"screened.{ending}"
    write_table(screened, path, provenance=None, units={}, text_columns=["id", "host_id"])
    out = report(read_table(path), RECIPE, None, tmp_path / "r.html")
    again = _Page(out.read_text(encoding="utf-8")).words
    sentence = re.search(r"Of [\d,]+ black holes.*?Cautions.*?Figures", parsed.words)
    assert sentence is not None
    assert sentence[0] in again


@needs_chromium
def test_a_browser_loads_it_without_error_or_request(page, tmp_path):
    dom, console, asked = chromium.console(page, tmp_path / "net.json")
    assert "What stays hidden" in dom
    assert console == []
    assert asked == []


@needs_chromium
def test_the_browser_test_would_notice_a_request(tmp_path):
    page = tmp_path / "leaky.html"
    page.write_text('<body><img src="http://192.0.2.1/x.png"><script>console.error(1)</script>')
    _, console, asked = chromium.console(page, tmp_path / "net.json")
    assert any("192.0.2.1" in url for url in asked)
    assert console


@needs_chromium
def test_the_browser_test_would_notice_words_on_words(tmp_path):
    page = tmp_path / "crowded.html"
    page.write_text("<!DOCTYPE html><body><p>one</p><p style='margin-top: -2em'>two</p></body>")
    seen = chromium.measured(page, tmp_path / "copy.html", 400)
    assert seen["overlaps"] == [["one", "two"]]


@needs_chromium
@pytest.mark.parametrize("width", [400, 1400])
def test_it_reads_well_on_a_phone_and_on_a_desk(page, tmp_path, width):
    from PIL import Image

    seen = chromium.measured(page, tmp_path / "copy.html", width)
    assert seen["width"] == width
    assert seen["wide"] <= width
    assert seen["overlaps"] == []
    assert seen["texts"] > 100
    names = [name for _, name, _ in seen["headings"]]
    for wanted in ("Answer", "Cautions", "Figures", "Rows near a criterion", "Laws", "Recipe"):
        assert wanted in names
    assert len(seen["figures"]) == 7

    height = int(min(seen["tall"], 9000))
    shot = chromium.photograph(page, tmp_path / "page.png", width, height)
    picture = np.asarray(Image.open(shot).convert("L"), dtype=float)
    assert picture.shape == (height, width)
    boxes = [*seen["figures"], *(box for _, _, box in seen["headings"])]
    for left, top, right, bottom in boxes:
        if bottom < height:
            patch = picture[int(top) : int(bottom) + 1, max(int(left), 0) : int(right) + 1]
            assert (patch < 128).mean() > 0.002  # ink where the layout says there is some
            assert (patch > 200).mean() > 0.3  # and paper around it
