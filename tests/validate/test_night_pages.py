"""A night's pages: what they say, how large they are, and that nobody's text becomes markup."""

from __future__ import annotations

import json
from dataclasses import replace
from html.parser import HTMLParser
from pathlib import Path

import junitparser
import night_pages_data as data
import pytest
import xmlschema

from truefall.validate.nightly.pages import summary_line, write_pages
from truefall.validate.nightly.pages.html_page import night_page
from truefall.validate.nightly.pages.json_report import report_document
from truefall.validate.nightly.pages.junit import junit_xml
from truefall.validate.nightly.pages.pictures import error_picture, trend_picture
from truefall.validate.nightly.pages.words import alike, deciding, headline, number, share


class Markup(HTMLParser):
    """Tags, and whether each is closed in order."""

    VOID = frozenset({"meta", "br", "img", "circle", "line", "polyline"})

    def __init__(self) -> None:
        super().__init__()
        self.open, self.tags, self.attributes = [], [], []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag not in self.VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs

    def handle_endtag(self, tag):
        assert self.open.pop() == tag


def parsed(page: str) -> Markup:
    found = Markup()
    found.feed(page)
    assert not found.open
    return found


def test_sixty_cases_over_four_hundred_nights_stay_below_three_megabytes(tmp_path):
    """Three files, well-formed, nothing loaded from anywhere."""
    night, trends = data.large_night()
    paths = write_pages(night, trends, tmp_path)
    page = (tmp_path / "index.html").read_text("utf-8")
    markup = parsed(page)

    assert [p.name for p in paths] == ["index.html", "report.json", "junit.xml"]
    assert len(page.encode()) < 3_000_000
    assert "script" not in markup.tags
    assert "link" not in markup.tags
    assert not [v for k, v in markup.attributes if k in ("src", "href") and "://" in (v or "")]
    assert page.count("<svg") >= 2 * 57


def test_the_page_tells_the_verdict_the_change_the_cause_and_every_case():
    """What a person has one minute for, in this order."""
    night, trends = data.large_night()
    page = night_page(night, trends)
    order = [
        "Of 60 cases, 1 did not run, 1 fails, 1 is undecided, 57 pass.",
        "Alarm: error grew", "The largest position error grew from 2.1e-9 m to 9.9e-8 m.",
        "Look at these first", "the TCB value where the TDB value was meant", "All cases",
        "Environment",
    ]  # fmt: skip
    places = [page.index(text) for text in order]

    assert places == sorted(places)
    for case in night.cases:
        assert case.key in page
    for word in ("python", "x86_64", "tidy the step control", "nights/00400.h5"):
        assert word in page


def test_a_clean_night_and_a_first_night_say_so():
    """No list of troubles where there are none."""
    cases = tuple(data.case(k) for k in range(3))
    clean = data.night(cases, exit_status=0, verdict="pass")
    page = night_page(clean, {})

    assert "All 3 cases within budget." in page
    assert "Nothing got worse since night 399." in page
    assert "Look at these first" not in page
    assert "the first night" in night_page(replace(clean, previous=None), {})
    assert summary_line(clean) == "OK  truefall night 400 of halden: All 3 cases within budget."


@pytest.mark.parametrize("text", data.HOSTILE)
def test_hostile_text_stays_text(text):
    """In names, reasons, findings, commits, environment: no tag and no attribute of theirs."""
    night, trends = data.hostile_night()
    page = night_page(night, trends)
    markup = parsed(page)

    assert "script" not in markup.tags
    assert "img" not in markup.tags
    assert not [k for k, _ in markup.attributes if k.startswith("on")]
    if "<" in text:
        assert text not in page
    assert "\x1b" not in page
    assert "\x00" not in page
    line = summary_line(night)
    assert "\n" not in line
    assert line.isprintable()


def test_the_json_document_holds_every_figure():
    """Round trip; NaN becomes null."""
    night, _ = data.large_night()
    bad = data.case(61, errors={"position": {"max": float("nan"), "rms": 1.0, "at_time": None}})
    night = replace(night, cases=(*night.cases, bad))
    found = json.loads(json.dumps(report_document(night), allow_nan=False))

    assert found["schema_version"] == 1
    assert found["headline"] == headline(night)
    assert len(found["cases"]) == 61
    assert found["cases"][3]["findings"][0]["cause"] == "gm-scaled"
    assert found["cases"][0]["errors"]["position"]["max"] == night.cases[0].position_error
    assert found["cases"][-1]["errors"]["position"]["max"] is None


@pytest.fixture(scope="module")
def schema():
    return xmlschema.XMLSchema(Path(__file__).with_name("junit_subset.xsd"))


@pytest.mark.parametrize("which", ["large", "hostile", "clean"])
def test_junit_keeps_to_the_common_subset(schema, which, tmp_path):
    """Schema, and a consumer that counts what it reads."""
    nights = {
        "large": data.large_night()[0], "hostile": data.hostile_night()[0],
        "clean": data.night(tuple(data.case(k) for k in range(2)), exit_status=0),
    }  # fmt: skip
    night = nights[which]
    text = junit_xml(night)
    schema.validate(text)
    path = tmp_path / "junit.xml"
    path.write_text(text, encoding="utf-8")
    read = junitparser.JUnitXml.fromfile(str(path))

    keys = {case.key for case in night.cases} | set(night.missing)
    assert sum(suite.tests for suite in read) == len(keys)
    if which == "large":
        totals = [sum(getattr(s, k) for s in read) for k in ("failures", "errors", "skipped")]
        assert totals == [1, 2, 0]


def outcomes(night):
    """Element name and type of every test case, by name."""
    found = {}
    read = junitparser.JUnitXml.fromstring(junit_xml(night).encode())
    for suite in read:
        for case in suite:
            found[case.name] = [(type(r).__name__, r.type) for r in case.result]
    return found


def test_junit_tells_verdicts_alarms_and_vanished_cases_apart():
    """Names carry no figures, so that a server's history holds together."""
    cases = (
        data.case(0), data.case(1, "fail"), data.case(2, "undecided"),
        data.case(3, "not-run", outcome="timed out"), data.case(4, "unusable"),
        data.case(5, "not-judged"),
    )  # fmt: skip
    alarm = data.Alarm("error-grew", "ours/case-00", "grew", 1.0, 3.0)
    night = data.night(cases, alarms=(alarm,), missing=("ours/gone",))
    found = outcomes(night)

    assert found == {
        "case-00": [("Failure", "error-grew")], "case-01": [("Failure", "nonconforming")],
        "case-02": [("Error", "undecided")], "case-03": [("Error", "timed-out")],
        "case-04": [("Error", "unusable")], "case-05": [("Skipped", None)],
        "gone": [("Error", "case-vanished")],
    }  # fmt: skip
    assert outcomes(replace(night, undecided="skip"))["case-02"] == [("Skipped", None)]
    assert outcomes(replace(night, undecided="pass"))["case-02"] == []


def test_pictures_show_what_there_is_and_say_it_in_words():
    """Gaps at new segments, a dashed budget, nothing where there is nothing."""
    case = data.case(1)
    picture = error_picture(case)
    both = trend_picture(case, data.trend(1, 40))

    assert 'role="img"' in picture
    assert "dashed: the budget" in picture
    assert both.count("<polyline") == 2
    assert "1 new segment, marked by dotted lines" in both
    assert error_picture(data.case(2, curve=((), ()))) == ""
    assert error_picture(data.case(2, curve=((0.0, 1.0), (0.0, 0.0)))) == ""
    assert trend_picture(case, None) == ""
    assert trend_picture(case, data.trend(1, 1)).count("<circle") == 1


def test_cases_with_one_cause_are_told_once_and_the_deciding_quantity_is_named():
    """Of 42 failures of one cause one is shown in full; a clock out of budget is called so."""
    found = ({"cause": "gm-in-wrong-unit", "family": "constants", "text": "gm is in km"},)
    cases = tuple(data.case(k, "fail", findings=found) for k in range(42))
    errors = {
        "position": {"max": 1e-9, "rms": 1e-9, "at_time": 1.0},
        "clock": {"max": 5e-3, "rms": 1e-3, "at_time": 1.0},
    }
    budget = {"position": 1e-6, "clock": 1e-3}
    late = data.case(50, "fail", errors=errors, budget=budget, margin=-4.0)
    night = data.night((*cases, late), alarms=())
    groups, left_out = alike(night)
    page = night_page(night, {})

    assert sorted(len(g) for g in groups) == [1, 42]
    assert left_out == 0
    assert "The same in 41 more:" in page
    assert deciding(late) == "clock"
    assert "Largest clock error 5.0e-03 s, budget 1.0e-03." in page
    assert deciding(data.case(1, budget={"per_revolution.position": 1e-6})) == ""


def test_large_campaigns_keep_the_page_bounded():
    """Two thousand cases: the worst are shown, the rest is counted; the JSON has all."""
    cases = tuple(data.case(k, name=f"case-{k:04d}") for k in range(2000))
    alarms = tuple(data.Alarm("error-grew", c.key, "grew") for c in cases)
    night = data.night(cases, alarms=alarms)
    page = night_page(night, {})

    assert len(page.encode()) < 3_000_000
    assert "1500 better cases are not shown" in page
    assert "And 1960 more, all in" in page
    assert len(report_document(night)["cases"]) == 2000


def test_names_that_utf_8_cannot_hold_are_written_all_the_same(tmp_path):
    """Lone surrogates, as file names that are no UTF-8 give them."""
    bad = data.case(0, "fail", name="x\udcff", reason="\udcff", result_set="nights/\udcff#.h5")
    paths = write_pages(data.night((bad,)), {}, tmp_path)

    assert json.loads(paths[1].read_text("utf-8"))["cases"][0]["case"] == "x\udcff"
    assert "%23.h5" in paths[0].read_text("utf-8")
    assert "x#xDCFF" in paths[2].read_text("utf-8")


def test_numbers_in_words():
    """Two digits, shares in per cent, dashes for nothing."""
    assert [number(v) for v in (None, float("nan"), 0.0, 1.234e-7)] == ["–", "–", "0", "1.2e-07"]
    assert [share(v) for v in (None, 0.5, 1.0, 0.9998, -0.5, -40.0)] == [
        "–", "50 %", "100 %", "> 99 %", "-50 %", "41 times the budget",
    ]  # fmt: skip
