"""The page of a batch: its table, trends, fits and failures, for a few traces and for thousands."""

from __future__ import annotations

import csv
import json
import re
from pathlib import Path

import numpy as np
import pytest
from pages import BROWSER, Page, browse

from spinfit.errors import InputError
from spinfit.report.batch_html import MOST_FITS, batch_report_text, read_curves, read_summary, write_batch_report

EVIL = "</script><script>alert(1)</script>\"'&"
HEADINGS = ["trace", "status", "outlier", "dose", "temperature", "r.g", "r.g_uncertainty", "r.width.gaussian",
            "r.width.gaussian_uncertainty", "chi2_reduced", "warnings", "seconds", "hash", "reason"]  # fmt: skip
needs_browser = pytest.mark.skipif(BROWSER is None, reason="no chromium")


def rows(count: int) -> list[list[str]]:
    """Rows whose g falls with the temperature, which runs down; row 2 stands out, row 3 failed, row 4 did not end."""
    found = []
    for n in range(count):
        g, T = 2.005 - 1e-6 * n, 300 - n
        row = [f"k_{n:04d}", "good", "", f"{n % 7}", f"{T}", repr(g), "1e-5", "0.5", "0.01", "1.0", "", "0.1", "ab", ""]
        if n == 2:
            row[2], row[5] = "r.g", "2.1"
        if n == 3:
            row[1:] = ["failed", "", "3", *[""] * 9, "ff", "no such file"]
            row = row[: len(HEADINGS) - 1] + ["no such file"]
        if n == 4:
            row[1], row[10] = "not converged", "not_converged strong_correlation"
        found.append(row)
    return found


def folder_of(place: Path, table: list[list[str]], *, drawn: int | None = None) -> Path:
    place.mkdir(exist_ok=True)
    with open(place / "summary.csv", "w", encoding="utf-8", newline="") as stream:
        csv.writer(stream).writerows([HEADINGS, *table])
    (place / "units.json").write_text(json.dumps({"temperature": "K", "r.width.gaussian": "mT"}), encoding="utf-8")
    field = np.linspace(330.0, 340.0, 30)
    for row in table[:drawn]:
        if row[1] != "failed" and "/" not in row[0]:
            (place / row[0]).mkdir()
            lines = [f"{x:g},{np.sin(x):.4f},{np.sin(x) + 0.01:.4f},0,0" for x in field]
            text = "\n".join(["field_mT,measured,fitted,residual,r", *lines])
            (place / row[0] / "curves.csv").write_text(text, encoding="utf-8")
    return place


def test_a_page_holds_table_trends_fits_and_failures(tmp_path):
    folder = folder_of(tmp_path / "kilns", rows(12))
    (folder / "k_0001" / "report.html").write_text("x", encoding="utf-8")
    assert write_batch_report(folder) == folder / "report.html"
    page = Page((folder / "report.html").read_text(encoding="utf-8"))
    page.check()
    for word in ("kilns", "12 traces: 10 good, 1 failed, 1 not converged", "no such file", "1 hold a value",
                 "2.004999(10)", "r.width.gaussian / mT", "temperature / K", "strong_correlation (1)",
                 "11 of 11 fits"):  # fmt: skip
        assert word in page.text, word
    assert page.links == ["k_0001/report.html"]
    assert page.source.count('<svg class="drawing trend"') == 2
    assert page.source.count('class="out"') == 1
    assert "hash" not in page.text


def test_the_numbers_of_the_table_are_those_of_the_file(tmp_path):
    folder = folder_of(tmp_path / "k", rows(9), drawn=0)
    page = batch_report_text(folder)
    (head,) = re.findall(r"<table class=\"rows\"><thead><tr>(.*?)</tr>", page)
    titles = re.findall(r'data-title="([^"]*)"', head)
    column = titles.index("r.g")
    body = page.split('<table class="rows">')[1].split("<tbody>")[1].split("</tbody>")[0]
    cells = [re.findall(r"<td[^>]*>", line)[column] for line in body.split("\n")]
    values = [float(found[1]) if (found := re.search(r'data-v="([^"]+)"', cell)) else None for cell in cells]
    assert values == [float(row[5]) if row[5] else None for row in rows(9)]


def test_thousands_of_traces_show_a_choice(tmp_path):
    table = rows(3000)
    folder = folder_of(tmp_path / "k", table, drawn=120)
    page = batch_report_text(folder)
    shown = re.findall(r"<figcaption><b>(\w+)</b>", page)
    assert len(shown) == len(set(shown)) <= MOST_FITS
    assert {"k_0002", "k_0004"} <= set(shown)  # the outlier and the one that did not converge
    assert "Shown are those that went wrong, outliers" in page
    assert page.count("<tr data-kind") == 3000
    assert len(page) < 4_000_000


def test_texts_from_users_are_escaped_and_names_stay_inside(tmp_path):
    table = rows(6)
    table[0] = [EVIL, EVIL, EVIL, "1", "2", "2.0", "0.1", "0.5", "0.1", "1", EVIL, "0", "0", EVIL]
    table[1][0] = "../outside"
    (tmp_path / "outside").mkdir()
    (tmp_path / "outside" / "curves.csv").write_text("field_mT,measured,fitted\n1,2,3\n2,3,4\n", encoding="utf-8")
    folder = tmp_path / "k"
    folder_of(folder, [row for row in table if "/" not in row[0]])
    folder_of(folder, table, drawn=0)
    page = Page(batch_report_text(folder))
    page.check()
    assert page.seen.count("script") == 2
    assert "<figcaption><b>../outside" not in page.source
    assert page.text.count("alert(1)") >= 4


def test_what_is_damaged_does_no_harm(tmp_path):
    folder = folder_of(tmp_path / "k", rows(8))
    (folder / "units.json").write_text("[1", encoding="utf-8")
    (folder / "k_0000" / "curves.csv").write_text("angle_deg,measured_mT\n1,2\n", encoding="utf-8")
    (folder / "k_0001" / "curves.csv").write_bytes(b"\xff\xfe")
    (folder / "k_0005" / "curves.csv").write_text("field_mT,measured,fitted\n1,2\n", encoding="utf-8")
    page = batch_report_text(folder)
    Page(page).check()
    assert page.count("<figcaption>") == 4
    several = "trace,field_mT,measured,fitted\na,1,2,3\na,2,3,4\nb,1,9,9\n"
    (folder / "k_0000" / "curves.csv").write_text(several, encoding="utf-8")
    field, measured, fitted = read_curves(folder / "k_0000" / "curves.csv")
    assert (field.tolist(), measured.tolist(), fitted.tolist()) == ([1, 2], [2, 3], [3, 4])


def test_a_folder_without_a_table_is_refused(tmp_path):
    with pytest.raises(InputError, match="cannot be read"):
        batch_report_text(tmp_path)
    (tmp_path / "summary.csv").write_text("a,b\n1,2\n", encoding="utf-8")
    with pytest.raises(InputError, match='has no column "trace"'):
        read_summary(tmp_path)
    (tmp_path / "summary.csv").write_text("trace,status\n", encoding="utf-8")
    assert "0 traces" in batch_report_text(tmp_path)


ACT = """
const say = (key, value) => { document.body.dataset[key] = value; };
const table = document.querySelector("table.rows"), head = [...table.tHead.rows[0].cells];
const names = () => [...table.tBodies[0].rows].map((row) => row.cells[0].textContent);
const heading = (name) => head.find((one) => one.dataset.title === name);
heading("r.g").click(); say("up", names().join(" "));
heading("r.g").click(); say("down", names().join(" "));
const search = document.querySelector("input[type=search]");
search.value = "bad CONVERGED"; search.dispatchEvent(new Event("change")); say("found", names().join(" "));
search.value = ""; search.dispatchEvent(new Event("change")); say("all", names().length);
const trend = document.querySelector("svg.trend");
const dots = () => trend.querySelector('path[data-curve="good"]').getAttribute("d");
const title = () => trend.querySelector("text.below").textContent;
say("first", title()); say("before", dots().split("M").length - 1);
const select = document.querySelector(".against select");
select.value = String(head.indexOf(heading("dose"))); select.dispatchEvent(new Event("change"));
say("second", title()); say("places", new Set(dots().split("M").filter(Boolean).map((one) => one.split(" ")[0])).size);
select.value = "-1"; select.dispatchEvent(new Event("change")); say("third", title());
"""


@needs_browser
def test_the_table_sorts_filters_and_draws_in_a_browser(tmp_path):
    page = write_batch_report(folder_of(tmp_path / "k", rows(30)))
    browse(page)  # under its own policy
    shown = browse(page, act=ACT, width=500)
    got = dict(re.findall(r'data-(\w+)="([^"]*)"', re.search(r"<body[^>]*>", shown)[0]))
    up, down = got["up"].split(), got["down"].split()
    assert up[:2] == ["k_0029", "k_0028"]
    assert up[-2:] == ["k_0002", "k_0003"]  # the largest, then the one without a value
    assert down[0] == "k_0002"
    assert down[-1] == "k_0003"
    assert got["found"] == "k_0004"
    assert got["all"] == "30"
    assert (got["first"], got["second"], got["third"]) == ("temperature / K", "dose", "row of the table")
    assert got["before"] == "27"  # 30 less one failed, one outlier, one not converged
    assert got["places"] == "7"


LONG = """
const rows = () => document.querySelector("table.rows").tBodies[0].rows;
document.body.dataset.first = rows().length;
document.querySelector(".tools button").click();
document.body.dataset.more = rows().length;
const first = document.querySelector("table.rows th");
first.click(); first.click();
document.body.dataset.sorted = `${rows()[0].cells[0].textContent} ${rows().length}`;
document.body.dataset.drawn = document.querySelector('path[data-curve="good"]').getAttribute("d").split("M").length - 1;
"""


@needs_browser
def test_of_a_long_table_a_part_is_laid_out(tmp_path):
    page = write_batch_report(folder_of(tmp_path / "k", rows(1200), drawn=5))
    shown = browse(page, act=LONG)
    got = dict(re.findall(r'data-(\w+)="([^"]*)"', re.search(r"<body[^>]*>", shown)[0]))
    assert (got["first"], got["more"]) == ("500", "1000")
    assert got["sorted"] == "k_1199 500"
    assert got["drawn"] == "1197"  # all rows are in the trends
