# ruff: noqa: RUF001 (the page sets numbers with typographic signs)
"""The report as a page: read back with the standard library's HTML parser."""

import os
import re
import sys
from html.parser import HTMLParser

import numpy as np
import pytest
from downwarp_checkout.plugin.core.errors import DownwarpError
from downwarp_checkout.plugin.core.result import Estimate
from downwarp_checkout.plugin.report.page import MOST_FIGURES, Report, ReportedTransect, write_report

VOID = {"meta", "br", "hr", "img", "link", "input"}
NASTY = "<script>alert(1)</script>"
LINE = np.array([[10.0, 50.0], [14.0, 52.0]])


class Page(HTMLParser):
    """Elements, their attributes and all text of a page; fails where tags do not close in order."""

    def __init__(self, page):
        super().__init__()
        self.open, self.tags, self.attributes, self.text = [], [], [], ""
        self.feed(page)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs

    def handle_endtag(self, tag):
        assert self.open.pop() == tag

    def handle_data(self, data):
        if "style" not in self.open:
            self.text += data


def written(tmp_path, transects, **more):
    target = tmp_path / "report.html"
    write_report(target, transects, **more)
    return target.read_text(encoding="utf-8")


def test_text_from_outside_is_shown_as_text_everywhere(tmp_path, make_result):
    """A name, a remark, an option, a failure, an input, a version and a title that are markup: none becomes an element,
    each is read as it was."""
    result = make_result(NASTY, remarks=("<b onload='x'>bold</b>",))
    page = Page(
        written(
            tmp_path,
            [ReportedTransect(result, LINE), ReportedTransect(make_result('" onmouseover="alert(2)'), LINE)],
            failures=[(NASTY, "because <i>")],
            inputs={"TRANSECTS": f"lines.gpkg|layername={NASTY}", "<u>": "x"},
            versions={"<em>": NASTY},
            title=f"Report {NASTY}",
        )
    )
    assert "script" not in page.tags
    assert not {"u", "em"} & set(page.tags)
    assert not [name for name, _ in page.attributes if name.startswith("on")]
    assert page.text.count(NASTY) >= 6
    assert "<b onload='x'>bold</b>" in page.text and "because <i>" in page.text


def test_page_refers_to_nothing_outside_itself(tmp_path, make_result):
    text = written(tmp_path, [ReportedTransect(make_result(searched=True), LINE)] * 2)
    page = Page(text)
    for name, value in page.attributes:
        if name in ("href", "src", "xlink:href", "srcset", "data", "action", "poster"):
            assert value.startswith("#"), (name, value)
    assert "@import" not in text
    assert re.findall(r"url\((?!#)", text) == []
    addresses = set(re.findall(r"https?://[^\"' <]+", text))
    assert addresses <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}  # names, never fetched


def test_links_and_figures_point_at_what_is_there(tmp_path, make_result):
    text = written(tmp_path, [ReportedTransect(make_result(searched=True), LINE)] * 2)
    names = set(re.findall(r'\bid="([^"]+)"', text))
    used = set(re.findall(r'href="#([^"]+)"', text)) | set(re.findall(r"url\(#([^)]+)\)", text))
    assert used and used <= names


def test_a_transect_has_its_figures_and_every_value(tmp_path, make_result):
    page = Page(written(tmp_path, [ReportedTransect(make_result(searched=True), LINE)], inputs={"TE_FROM": "1 km"}))
    assert page.tags.count("figure") == 5  # map, profile, posterior, misfit, choices
    for part in (
        "Elastic thickness 30.0 km (90 % interval 21.6 to 41.7 km)",
        "trench and outer rise",
        "8.00 × 10¹¹",
        "5.00 × 10¹¹ to 1.20 × 10¹²",
        "window ends sooner",
        "from 20.0, open above",
        "no basis for drilling, navigation, siting or engineering",
        "TE_FROM",
    ):
        assert part in page.text


def test_several_transects_have_a_summary_and_a_figure_along_strike(tmp_path, make_result):
    results = [make_result("A"), make_result("B", thickness=Estimate(30e3)), make_result("C")]
    page = Page(
        written(
            tmp_path,
            [ReportedTransect(result, LINE, 10e3 * place) for place, result in enumerate(results)],
            failures=[("D", "the DEM has no value anywhere along the line.")],
        )
    )
    assert "Of 4 transects, 2 resolve the elastic thickness" in page.text
    assert "1 was fitted without resolving it; 1 could not be fitted" in page.text
    assert "All transects" in page.text
    assert page.tags.count("figure") == 2 + 3 * 3


def test_without_places_there_is_no_map(tmp_path, make_result):
    page = Page(written(tmp_path, [ReportedTransect(make_result())]))
    assert page.tags.count("figure") == 3


def test_nothing_fitted_still_gives_a_page_that_says_why(tmp_path):
    page = Page(written(tmp_path, [], failures=[("line 3", "it is too short.")]))
    assert "No transect could be fitted." in page.text
    assert "it is too short." in page.text


def test_thirty_transects_of_a_thousand_stations_stay_below_five_megabytes(tmp_path, make_result):
    results = [make_result(f"line {place}", stations=1001, searched=True, seed=place) for place in range(3)]
    target = tmp_path / "report.html"
    write_report(target, [ReportedTransect(results[place % 3], LINE + 0.1 * place) for place in range(30)])
    assert target.stat().st_size < 5e6


def test_transects_beyond_the_limit_are_in_the_summary_only(make_result):
    report = Report({}, {})
    result = make_result(stations=51, choices=False)
    report._missing = "no figures here"  # for speed
    for _ in range(MOST_FIGURES + 2):
        report.add(ReportedTransect(result))
    page = Page(report.page())
    assert page.text.count("Places that matter") == MOST_FIGURES
    assert str(MOST_FIGURES + 2) in page.text
    assert [name for name, value in page.attributes if value == f"#t{MOST_FIGURES + 1}"] == []


def test_without_matplotlib_the_page_says_what_is_missing_and_how_to_get_it(tmp_path, make_result, monkeypatch):
    for name in [name for name in sys.modules if name.partition(".")[0] == "matplotlib"]:
        monkeypatch.delitem(sys.modules, name)
    monkeypatch.setitem(sys.modules, "matplotlib", None)
    page = Page(written(tmp_path, [ReportedTransect(make_result(), LINE)]))
    assert "matplotlib" in page.text and "apt install python3-matplotlib" in page.text
    assert "figure" not in page.tags
    assert "Elastic thickness 30.0 km" in page.text


def test_a_folder_that_is_not_there_is_named(tmp_path, make_result):
    target = tmp_path / "nowhere" / "report.html"
    with pytest.raises(DownwarpError, match=r"REPORT cannot be written to .*nowhere.*: No such file or directory"):
        write_report(target, [])


def test_a_page_that_cannot_be_finished_leaves_the_old_one_and_no_rest(tmp_path, monkeypatch):
    target = tmp_path / "report.html"
    target.write_text("old", encoding="utf-8")

    def fail(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr(os, "replace", fail)
    with pytest.raises(DownwarpError, match="No space left"):
        write_report(target, [])
    assert target.read_text(encoding="utf-8") == "old"
    assert os.listdir(tmp_path) == ["report.html"]
