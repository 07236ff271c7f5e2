"""The page as text: self-contained, safe, in order, the same every time."""

from __future__ import annotations

import base64
import hashlib
import re
from html.parser import HTMLParser

import numpy as np
import pytest

from mwdlink.errors import ModelError
from mwdlink.report import blend_live, index_page, render
from mwdlink.report.keys import blocks, card_block, heading, said

VOID = {"meta", "link", "input", "br", "hr", "img"}


class Reader(HTMLParser):
    """Collects elements, ids and references, and checks that elements close in order."""

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.open: list[str] = []
        self.elements: list[tuple[str, dict[str, str | None]]] = []
        self.text: list[str] = []

    def handle_starttag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.elements.append((tag, dict(attrs)))

    def handle_endtag(self, tag):
        assert self.open and self.open[-1] == tag, (tag, self.open[-3:])
        self.open.pop()

    def handle_data(self, data):
        if self.open and self.open[-1] not in {"style", "script"}:
            self.text.append(data)


def read(page: str) -> Reader:
    reader = Reader()
    reader.feed(page)
    reader.close()
    assert reader.open == []
    return reader


@pytest.mark.parametrize("name", ["invert", "datasheet", "live"])
def test_self_contained_and_well_formed(page_of, name):
    """Stated rule: no outside reference; compared with the HTML standard's nesting (published)."""
    page = page_of(name)
    reader = read(page)
    for tag, attrs in reader.elements:
        assert tag not in {"iframe", "object", "embed", "form", "base"}
        for key, value in attrs.items():
            assert not key.startswith("on"), key
            if key in {"src", "href", "xlink:href", "data", "action"}:
                assert value is not None and value.startswith(("#", "data:")), value
    for address in re.findall(r"https?://[^\"' <)]+", page):
        assert address.startswith("http://www.w3.org/"), address
    assert "@import" not in page and not re.search(r"url\((?!#)", page)
    ids = [a["id"] for _, a in reader.elements if "id" in a]
    assert len(ids) == len(set(ids))
    wanted = set(re.findall(r"url\(#([^)]+)\)|href=\"#([^\"]+)\"", page.split("<script")[0]))
    assert {a or b for a, b in wanted} <= set(ids)
    for _, attrs in reader.elements:
        for key in ("aria-labelledby", "for"):
            assert set((attrs.get(key) or "").split()) <= set(ids)


def test_policy_allows_nothing_but_the_live_script(page_of):
    """Published standard (CSP 3): scripts by hash alone, and none at all without the slider."""
    policy = re.compile(r'http-equiv="Content-Security-Policy" content="([^"]+)"')
    plain = policy.search(page_of("invert"))[1]
    assert plain.startswith("default-src 'none'") and "script-src" not in plain
    assert "<script" not in page_of("invert")
    live = page_of("live")
    assert live.index("Content-Security-Policy") < live.index("<style")
    script = re.search(r"<script>(.*?)</script>", live, re.S)[1]
    digest = base64.b64encode(hashlib.sha256(script.encode()).digest()).decode()
    assert f"script-src 'sha256-{digest}'" in policy.search(live)[1]
    assert "unsafe-eval" not in live and "eval(" not in script and "innerHTML" not in script


def test_user_text_cannot_break_out(page_of):
    """Stated rule: every label, path and command line is text, never markup."""
    page = page_of("invert")
    assert "<script>alert" not in page and "<b>A" not in page and "<x>" not in page
    text = " ".join(read(page).text)
    assert "Pipe <script>alert(1)</script> & 'co'" in text
    assert "data/<b>A & B</b>/sweep.csv" in text
    assert "mwdlink do 'data/A & B/<x>.csv' --label 'sample=a \"b\"' --out result" in text


def test_hostile_names_in_live_data(made_up):
    """A component's name may not end the data block or the page's markup."""
    from mwdlink.report.blend_live import check, data_block, section

    data = made_up.live_quadratic()
    data["components"] = ["</script><img src=x onerror=alert(1)>", "\u2028B&"]
    data["properties"][0]["label"] = "<i>eta0</i>"
    block = data_block(check(data))
    assert block.count("<") == 2 and "</script><" not in block[:-9]
    assert "<img" not in section(check(data)) and "<i>" not in section(check(data))


def test_order_and_content(page_of):
    """Stated order of the page."""
    page = page_of("invert")
    order = [
        "Answer",
        "To copy",
        "What the data cannot say",
        "Figures",
        "What would help",
        "Numbers",
        "How it was done",
        "Where the material&#x27;s numbers come from",
        "Cautions",
    ]
    places = [page.index(f">{title}</h2>") for title in order]
    assert places == sorted(places)
    live = page_of("live")
    assert (
        live.index("What the data cannot say</h2>")
        < live.index("Try another fraction")
        < live.index("Figures</h2>")
    )
    text = " ".join(read(page).text)
    for words in (
        "lot",
        'L"42',
        "operator",
        "2026-03-02",
        "Mw is 1.20e5 g/mol (1.10e5 to 1.30e5, 90 %).",
        "Seed",
        "power-law",
        "ab12ab12",
        "lower bound",
        "assumed, not from the data",
        "Raju",
        "recalled",
        "smoothing was picked",
    ):
        assert words in text, words
    # cautions once
    assert text.count("The smoothing was picked at the end of its scan.") == 1


def test_document_basics(page_of):
    """Published practice (WCAG 2.1): language, viewport, one h1, headings in steps, names."""
    page = page_of("invert")
    reader = read(page)
    assert (
        '<html lang="en">' in page
        and 'name="viewport" content="width=device-width, initial-scale=1"' in page
    )
    levels = [int(t[1]) for t, _ in reader.elements if re.fullmatch(r"h[1-6]", t)]
    assert levels.count(1) == 1 and levels[0] == 1
    assert all(b - a <= 1 for a, b in zip(levels, levels[1:], strict=False))
    svgs = [a for t, a in reader.elements if t == "svg"]
    assert svgs and all(a.get("role") == "img" and a.get("aria-labelledby") for a in svgs)
    assert page.count("<figure") == page.count("<details") == len(svgs)
    for tag, attrs in reader.elements:
        if attrs.get("class") == "scroll":
            assert attrs["tabindex"] == "0" and attrs["role"] == "region" and attrs["aria-label"]
        if tag == "th":
            assert attrs.get("scope") in {"row", "col"}


def test_the_same_text_every_time(made_up, page_of):
    """House rule: same input, same bytes."""
    from mwdlink.figures import figures_for

    result = made_up.datasheet()
    record = {"command": "datasheet", "labels": {}, **result.to_dict()}
    once = render(result, record, figures_for(result), command_line=None)
    assert once == render(
        made_up.datasheet(), record, figures_for(made_up.datasheet()), command_line=None
    )


def test_long_tables_are_thinned_and_say_so(page_of):
    """Stated rule: at most 24 rows behind a figure, the rest in the CSV."""
    page = page_of("rest")
    assert "Every 4th of 90 rows; all in figures/rest.csv." in page
    for body in re.findall(r"<details>.*?<tbody>(.*?)</tbody>", page, re.S):
        assert body.count("<tr>") <= 24


def test_bare_result_still_gives_a_page(made_up):
    """A record with nothing but its command: no empty sections."""
    result = made_up.MadeUp("rest", {}, {}, answer="Wait.", paragraph="Wait.", cannot_say=())
    page = render(result, {"command": "rest"}, {}, command_line=None)
    read(page)
    for title in ("Figures", "Numbers", "Cautions", "What the data cannot say"):
        assert f">{title}</h2>" not in page


def test_keys_in_words():
    """Derived from the documented keys and units."""
    assert heading("eta0_Pa_s") == "Zero-shear viscosity η₀ / Pa s"
    assert heading("MFR_g_per_10min") == "Melt flow rate MFR / g/10 min"
    assert heading("eta_0.1") == "Viscosity at 0.1 rad/s / Pa s"
    assert heading("thinning_0.1_100") == "Thinning, viscosity at 0.1 over 100 rad/s"
    assert heading("M_g_per_mol_low") == "Molar mass, low / g/mol"
    assert (
        said({"value": 1.0, "low": 0.5, "high": 2.0, "level": 0.9, "status": "lower_bound"})
        == "1.00 (0.500 to 2.00), lower bound"
    )
    assert (
        said({"A": 0.75, "B": 0.25}) == "A 0.750; B 0.250"
        and said(None) == "–"
        and said(False) == "no"
    )


def test_plain_numbers_take_their_bands(made_up):
    """Documented: the intervals of predict, blend and spectrum stand in the key `bands`."""
    found = {b.caption: b for b in blocks(made_up.predict().to_dict())}
    row = next(r for r in found["Terminal properties"].rows if "η₀" in r[0])
    assert row[1:4] == ("91\u202f000", "63\u202f700 to 1.18×10⁵", "90 %")
    assert "Melt flow rates" in found and len(found["Melt flow rates"].rows) == 2


def test_card_numbers_have_status_and_source():
    """Stated rule: each number of the card with status and source."""
    from mwdlink.chains.polymer import builtin

    block = card_block(builtin("hdpe").to_dict())
    assert len(block.rows) > 8
    assert all(row[3] for row in block.rows)
    assert any("Raju" in row[4] for row in block.rows)


def test_index_page_links():
    """Relative addresses, escaped."""
    page = index_page(
        "Demo <1>", ["All of it."], [("invert/report.html", "Read a sweep", "Mw is 1 & 2.")]
    )
    read(page)
    assert (
        '<a href="invert/report.html">' in page and "Demo &lt;1&gt;" in page and "1 &amp; 2" in page
    )


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"mode": "cubic"}, "mode"),
        ({"components": ["A"]}, "two components"),
        ({"fraction": 1.2}, "within 0 to 1"),
        ({"omega": [1.0, 0.5]}, "ascending"),
        ({"curves": {}}, "lacks"),
        ({"band": {"fraction": [0.5], "storage": {"low": [[1.0]], "high": [[1.0]]}}}, "shape"),
        ({"properties": [{"key": "x", "kind": "magic"}]}, "unknown kind"),
        ({"properties": [{"key": "x", "fraction": [0, 1], "value": [1.0, np.nan]}]}, "finite"),
    ],
)
def test_live_data_is_checked(made_up, change, words):
    """Derived from the documented form."""
    with pytest.raises(ModelError, match=words):
        blend_live.check({**made_up.live_quadratic(), **change})
