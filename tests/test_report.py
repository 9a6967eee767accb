"""Reports: complete, correct, self-contained, and safe with any name."""

import base64
import re
from html.parser import HTMLParser
from xml.etree import ElementTree

import numpy as np
import pytest
from made_up import CONDITIONS, NAMES, made_up

from mfeat import __version__, charts
from mfeat.comparison import ALL
from mfeat.conditions import CONDITIONS as KNOWN
from mfeat.pages import html_page, markdown
from mfeat.report import CAUTION, Section, Table, short, verdict, write_report

VOID = {"meta", "img", "br", "hr", "link", "input"}


class Page(HTMLParser):
    """A page taken apart; complains about tags that are left open or closed in a wrong place."""

    def __init__(self, text):
        super().__init__()
        self.open, self.tags, self.tables, self.words = [], [], [], []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        assert len(dict(attrs)) == len(attrs)
        self.tags.append((tag, dict(attrs)))
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self.tables.append([])
        elif tag == "tr":
            self.tables[-1].append([])
        elif tag in ("td", "th"):
            self.tables[-1][-1].append("")

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        self.words.append(data)
        if self.open and self.open[-1] in ("td", "th"):
            self.tables[-1][-1][-1] += data

    def all(self, tag):
        return [attrs for one, attrs in self.tags if one == tag]


def unescaped(cell):
    for code, char in (("&lt;", "<"), ("&gt;", ">"), ("&amp;", "&")):
        cell = cell.replace(code, char)
    return cell.replace("\\|", "|").replace("**", "")


def tables_of(text):
    """Tables of a Markdown text: lists of rows of cells."""
    found = []
    for block in re.findall(r"(?:^\|.*\n)+", text, re.MULTILINE):
        rows = [re.split(r"(?<!\\)\|", line)[1:-1] for line in block.splitlines()]
        assert all(cell == "---" for cell in rows[1])
        assert len({len(row) for row in rows}) == 1
        found.append([[unescaped(cell.strip()) for cell in row] for row in rows if row != rows[1]])
    return found


def table_of(text, head):
    [found] = [table for table in tables_of(text) if table[0][0] == head]
    return found


def tables_with(text, *start):
    return [t for t in tables_of(text) if tuple(t[0][: len(start)]) == start]


FAILURES = {
    ("gone", "noise"): lambda repeat: f"ValueError: {repeat} <b> | & lost",
    ("ours", "blur"): lambda repeat: None,
}
ABLATED = ("ours", "better|half", "minkowski: without euler", "minkowski: only area")


@pytest.fixture
def undrawn(monkeypatch):
    """Leave the drawing out, which takes half a second a report."""
    for name in ("as_png", "as_svg"):
        monkeypatch.setattr(charts, name, lambda figure: b"<svg/>")


@pytest.fixture(scope="module")
def plain():
    found = made_up(failures=FAILURES, left_out=[("a&b<c>.png", "torn | file")])
    return found, write_report(found)


@pytest.fixture(scope="module")
def full():
    found = made_up(
        ABLATED, sizes=((16, 16), (32, 16)), trains=((2, 4), (2, 4, 8)), seed=1,
        failures={("minkowski: only area", "clean"): lambda repeat: "RuntimeError: no"},
    )  # fmt: skip
    return found, write_report(found)


def text_of(made):
    return made[1]["report.md"].decode()


def page_of(made):
    return Page(made[1]["report.html"].decode())


def test_files(plain, full):
    common = {"accuracy-by-condition", "accuracy-against-cost", "learning-curves"}
    for (_, files), drawn in ((plain, common), (full, common | {"ablation", "patch-size"})):
        names = {f"charts/{name}.{kind}" for name in drawn for kind in ("png", "svg")}
        assert set(files) == {"report.md", "report.html"} | names
        for name in names:
            if name.endswith("svg"):
                assert ElementTree.fromstring(files[name]).tag.endswith("svg")
            else:
                assert files[name].startswith(b"\x89PNG")
        linked = re.findall(r"!\[(.+)\]\((.+)\)", files["report.md"].decode())
        assert {place for _, place in linked} == {f"charts/{name}.png" for name in drawn}
        assert all(about.strip() for about, _ in linked)


def test_the_accuracy_table_has_everybody_under_every_condition(plain):
    found, _ = plain
    [table] = tables_with(text_of(plain), "descriptor", *CONDITIONS, ALL, "numbers")
    rows = {row[0]: row[1:] for row in table[1:]}
    assert set(rows) == set(NAMES)
    for name, cells in rows.items():
        for place, cell in zip((*CONDITIONS, ALL), cells, strict=False):
            mean = found.accuracy(name, place).mean
            assert cell == ("–" if np.isnan(mean) else f"{mean:.3f}".lstrip("0"))
        assert cells[-1] == str(found.cost(name)["n_features"])
    means = [found.accuracy(row[0]).mean for row in table[1:]]
    assert np.isnan(means[-1])  # failed ones last
    assert means[:-1] == sorted(means[:-1], reverse=True)


def test_the_html_has_the_tables_of_the_markdown(plain, full):
    for made in (plain, full):
        assert page_of(made).tables == tables_of(text_of(made))
        assert len(page_of(made).tables) > 5


def test_each_classifier_has_its_table(plain):
    found, _ = plain
    for classifier in ("lda", "svm"):
        table = table_of(text_of(plain), classifier)
        assert {row[0] for row in table[1:]} == set(NAMES)
        for row in table[1:]:
            mean = found.accuracy(row[0], "clean", classifier=classifier)
            assert row[1].startswith(short(mean.mean))
            assert f"[{short(mean.low)}, " in row[1]
        [gone] = [row for row in table if row[0] == "gone"]
        assert gone[2] == gone[4] == "failed"


def test_differences_are_marked_where_they_may_be_luck(plain):
    found, _ = plain
    others = [name for name in NAMES if name != "ours"]
    table = table_of(text_of(plain), "ours minus")
    tests = {(t.descriptor, t.condition): t for t in found.against_reference(others)}
    assert {row[0] for row in table[1:]} == set(others)
    marks = set()
    for row in table[1:]:
        for place, cell in zip((*CONDITIONS, ALL), row[1:], strict=True):
            test = tests[row[0], place]
            if np.isnan(test.difference.mean):
                assert cell == "failed"
                continue
            luck = test.adjusted_p >= 0.05
            marks.add(luck)
            assert cell == f"{test.difference.mean:+.3f}{' (may be luck)' * luck}"
    assert marks == {True, False}  # both kinds are among them


def test_the_verdict_names_the_best_other_and_its_p(plain):
    found, _ = plain
    said = verdict(found)
    own = found.accuracy("ours").mean
    others = {name: found.accuracy(name).mean for name in NAMES[1:3]}
    best = max(others, key=others.get)
    assert f"ours: {short(own)} over all conditions; the best other, {best}: " in said
    [test] = [
        t for t in found.against_reference(NAMES) if (t.descriptor, t.condition) == (best, ALL)
    ]
    assert f"The difference is {short(own - others[best])} [" in said
    assert f"p = {test.adjusted_p:.2g}" in said
    assert ("more than luck" in said) == (test.adjusted_p < 0.05)
    ahead = sum(
        all(found.accuracy("ours", c).mean > np.nan_to_num(found.accuracy(n, c).mean, nan=-1)
            for n in NAMES[1:]) for c in CONDITIONS
    )  # fmt: skip
    assert f"ahead of all others in {ahead} of 3 conditions" in said


@pytest.mark.parametrize(
    ("names", "failed", "text"),
    [
        (("ours",), (), r"^ours: \.\d{3} over all conditions\.$"),
        (("ours", "b"), ("ours",), "^ours failed under some condition"),
        (("ours", "b"), ("b",), "all others failed under some condition"),
        (("ours", "b"), ("ours", "b"), "^ours failed"),
    ],
)
def test_the_verdict_where_there_is_nobody_to_beat(names, failed, text):
    reasons = {(name, "clean"): lambda repeat: "gone" for name in failed}
    found = made_up(names, failures=reasons)
    assert re.search(text, verdict(found))


def test_a_report_of_failures_alone_is_a_report(caplog):
    reasons = {(name, place): lambda repeat: "gone" for name in NAMES for place in CONDITIONS}
    files = write_report(made_up(failures=reasons, costless=NAMES))
    page = Page(files["report.html"].decode())
    assert ["ours", "clean", "gone", "24"] in page.tables[-3]
    assert not caplog.records


def test_an_ablation_whose_reference_failed_has_no_chart(undrawn):
    reasons = {("ours", "clean"): lambda repeat: "gone"}
    files = write_report(made_up(ABLATED, failures=reasons, costless=("ours",)))
    assert "charts/ablation.png" not in files
    table = table_of(files["report.md"].decode(), "variant")
    assert table[1] == ["ours", "–", *table[1][2:4], "–", "", "–"]
    assert [row[0] for row in table[2:]] == ["without euler", "only area"]


def test_the_ablation_tells_the_change(full):
    found, _ = full
    table = table_of(text_of(full), "variant")
    assert [row[0] for row in table[1:]] == ["ours", "without euler", "only area"]
    change = found.accuracy("minkowski: without euler").mean - found.accuracy("ours").mean
    assert table[2][-2].startswith(f"{change:+.3f}")
    assert table[3][-2] == "–"
    for row in tables_with(text_of(full), "descriptor", "clean")[0][1:]:
        assert "without euler" not in row[0]  # variants have a table of their own


def test_learning_curves_and_patch_sizes(full):
    found, _ = full
    text = text_of(full)
    [learning] = tables_with(text, "descriptor", "2 a class")
    for row in learning[1:]:
        assert row[1:] == [short(found.accuracy(row[0], train_size=n).mean) for n in (2, 4)]
    [sizes] = tables_with(text, "descriptor", "16x16")
    assert sizes[0][1:] == ["16x16", "32x16"]
    for row in sizes[1:]:
        assert row[1:] == [short(found.accuracy(row[0], size=s).mean) for s in found.sizes]
    assert "16x16: 4 training patches a class; 32x16: 8 training patches a class" in text


def test_failures_and_what_was_left_out_are_named(plain):
    text = text_of(plain)
    [table] = tables_with(text, "descriptor", "condition", "failure")
    [row] = table[1:]
    assert row[:2] == ["gone", "noise"]
    assert row[2] == "ValueError: 0 <b> | & lost (and 2 other reasons)"
    assert row[3] == "24"
    assert ["a&b<c>.png", "torn | file"] in table_of(text, "left out")


def test_every_failing_descriptor_is_named_however_many_reasons_there_are(undrawn):
    reasons = {
        ("ours", "clean"): lambda repeat: f"{repeat} of 9",
        ("gone", "blur"): lambda repeat: f"{repeat} of 10",
    }
    found = made_up(failures=reasons, repeats=30, shuffled=False)
    assert len(found.failures()) > 20
    text = write_report(found)["report.md"].decode()
    rows = {tuple(row[:2]) for table in tables_of(text) for row in table}
    assert {("ours", "clean"), ("gone", "blur")} <= rows


def test_costs_that_failed_are_named(undrawn):
    text = write_report(made_up(costless=("gone",)))["report.md"].decode()
    [table] = [t for t in tables_of(text) if "failure" in t[0]]
    assert table[1:] == [["gone", "costs", "ValueError: no cost", "1"]]
    [costs] = [t for t in tables_of(text) if "peak MB" in t[0]]
    assert {row[0] for row in costs[1:]} == set(NAMES) - {"gone"}


def test_left_out_at_any_size_is_told(undrawn):
    found = made_up(sizes=((16, 16), (8, 8)), trains=((2,), (2,)))
    found.about["sizes"][0]["left_out"] = [["a.png", "torn"]]
    found.about["sizes"][1]["left_out"] = [["a.png", "torn"], ["b.png", "infinite"]]
    found.about["sizes"][1] |= {"mirrored": 3, "overlapping": True}
    text = write_report(found)["report.md"].decode()
    assert table_of(text, "left out")[1:] == [["a.png", "torn"], ["b.png", "infinite"]]
    assert "8x8: the surroundings of 3 of 30 patches" in text
    assert "8x8: patches overlap" in text
    assert "Nothing was left out" not in text
    many = made_up(left_out=[(f"{k}.png", "torn") for k in range(25)])
    text = write_report(many)["report.md"].decode()
    assert "25 left out; the first 20:" in text
    assert "Nothing was left out, and nothing failed." in write_report(made_up())[
        "report.md"].decode()  # fmt: skip


def test_conditions_and_settings_are_explained(plain):
    text = text_of(plain)
    table = table_of(text, "condition")
    assert [row[0] for row in table[1:]] == list(CONDITIONS)
    assert all(KNOWN[row[0]].about in row[1] for row in table[1:])
    assert f"mfeat {__version__}" in text
    assert ["ours", "pkg.ours()"] in tables_of(text)[-1]
    assert CAUTION in text


# The page ----------------------------------------------------------------------------------------


def test_the_page_needs_nothing_else(plain, full):
    for made in (plain, full):
        text = made[1]["report.html"].decode()
        page = Page(text)
        assert not page.all("script")
        assert not page.all("link")
        assert not re.search(r"https?://|@import|url\(|javascript:|\son\w+=", text)
        for attrs in page.all("img"):
            kind, data = attrs["src"].split(",")
            assert kind == "data:image/svg+xml;base64"
            ElementTree.fromstring(base64.b64decode(data))
            assert attrs["alt"].strip()
        assert len(page.all("img")) == sum(name.endswith(".svg") for name in made[1])


def test_the_page_can_be_found_ones_way_in(plain):
    page = page_of(plain)
    assert page.all("html") == [{"lang": "en"}]
    assert {"charset": "utf-8"} in page.all("meta")
    assert any(attrs.get("name") == "viewport" for attrs in page.all("meta"))
    sections = [attrs["id"] for attrs in page.all("section")]
    assert [attrs["href"] for attrs in page.all("a")] == [f"#{one}" for one in sections]
    assert len(set(sections)) == len(sections) > 5
    assert all(attrs["scope"] == "col" for attrs in page.all("th"))
    place = page.words.index(f" {CAUTION}")
    assert place < page.words.index("What was found")  # before the first section and its link


def test_no_name_becomes_markup(plain):
    html, text = (plain[1][name].decode() for name in ("report.html", "report.md"))
    for raw in ("a<b>", "<b> |", "b<c>"):
        assert raw not in html
        assert raw not in text
    page = page_of(plain)
    assert not page.all("b")
    assert not page.all("c")
    assert any("a<b> & c" in row for table in page.tables for row in table)


def test_the_rows_of_the_reference_are_stressed(plain):
    lines = text_of(plain).splitlines()
    stressed = [line for line in lines if line.startswith("| **")]
    assert len(stressed) >= 4
    assert all(line.startswith("| **ours** |") for line in stressed)
    own = [attrs for attrs in page_of(plain).all("tr") if attrs.get("class") == "own"]
    assert len(own) == len(stressed)


def test_reports_are_the_same_each_time(plain):
    found, files = plain
    assert write_report(found) == files


def test_pages_of_plain_sections():
    section = Section("<T>", ["x < y & z"], None, [Table(["a", "b"], [["1|2", "3\n4"]], "1|2")])
    text = markdown("title", "care", [section])
    assert "x &lt; y &amp; z" in text
    assert "| **1\\|2** | **3 4** |" in text
    page = Page(html_page("A & B", "care", [section], {}))
    assert page.tables == [[["a", "b"], ["1|2", "3\n4"]]]
    assert "<T>" in page.words
    empty = Section("none", [], None, [Table(["a"], [])])
    assert Page(html_page("t", "c", [empty], {})).tables == [[["a"]]]


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.9541, ".954"), (1.0, "1.000"), (0.0, ".000"), (-0.25, "-.250"), (float("nan"), "–"),
     (None, "–")],
)  # fmt: skip
def test_short(value, text):
    assert short(value) == text
