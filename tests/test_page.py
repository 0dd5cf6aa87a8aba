"""The page of a night: what it holds, and how it behaves in a real browser."""

import http.server
import json
import os
import re
import threading
from contextlib import closing
from dataclasses import replace

import night_fits
import numpy as np
import pytest
from browser import CHROMIUM, browse, instrumented
from night_fits import make_folder

from scatterfit.cli import main
from scatterfit.overnight.drift import drift, far_from_neighbours
from scatterfit.overnight.jobs import Job
from scatterfit.overnight.ledger import Ledger
from scatterfit.overnight.results import open_results
from scatterfit.overnight.work import measure
from scatterfit.report.page import PageError, embedded_json, page_text, write_page
from scatterfit.report.page_data import page_data
from scatterfit.report.page_thumbs import thumbnail
from scatterfit.report.rounding import format_number, format_quantity

COUNT = 150
MARKUP = "p111<img src=x onerror=alert(1)><b>bold&amp;.csv"
# A page's script runs only in a browser; the test run installs one where it may.
needs_browser = pytest.mark.skipif(CHROMIUM is None, reason="there is no chromium")


@pytest.fixture(scope="module")
def ledger(tmp_path_factory):
    """Return the ledger of a night with all kinds of pulses, one excluded by hand."""
    plan = replace(make_folder(tmp_path_factory.mktemp("page"), COUNT), fit=night_fits.mixed)
    (plan.folder / "p111.csv").rename(plan.folder / MARKUP)
    for index, path in enumerate(sorted(plan.folder.iterdir())):
        os.utime(path, (1.7e9 + 60 * index,) * 2)
    path = plan.folder.parent / "night.sqlite"
    with closing(Ledger(path)) as opened:
        opened.remember(folder=str(plan.folder), chamber="bench.toml", version="0.1.0")
        opened.keep_chamber("abc", "bench.toml", "# <script>alert(2)</script>")
        with opened.writing():
            for trace in plan.folder.iterdir():
                opened.put(Job(trace.name), "new")
        opened.store([measure(plan, job) for job in opened.claim(COUNT)])
        opened.connection.execute("UPDATE pulses SET chamber_sha256 = 'abc'")
        opened.exclude("p005.csv", "ann", "window <i>fogged</i>")
    return path


@pytest.fixture(scope="module")
def data(ledger):
    return page_data(open_results(ledger, excluded=True))


def index_of(data, name):
    return data["trace"].index(name)


# What the page holds


def test_the_page_is_one_file_that_loads_nothing(ledger, tmp_path):
    text = write_page(ledger, tmp_path / "night.html").read_text(encoding="utf-8")
    assert "default-src 'none'" in text
    assert not re.search(r"""(src|href)\s*=\s*["'](?!#)""", text.split('id="data"')[0])
    assert "@import" not in text
    assert "url(" not in text
    assert [path.name for path in tmp_path.iterdir()] == ["night.html"]


def test_every_pulse_and_what_was_said_of_it_is_there(data):
    assert len(data["trace"]) == COUNT
    counts = np.bincount(data["verdict"], minlength=4)
    assert counts.tolist() == [105, 15, 15, 15]
    codes = {entry["code"]: entry["count"] for entry in data["codes"]}
    assert codes == {"no-cloud": 15, "rival": 15, "unusable": 15}
    at = index_of(data, "p042.csv")
    assert data["values"]["final_radius_um"][at] == 1.0042
    assert data["sigmas"]["final_radius_um"][at] == 0.001
    assert data["values"]["final_radius_um"][index_of(data, "p003.csv")] is None
    assert data["values"]["upper_limit_per_cm3"][index_of(data, "p003.csv")] == 0.1


def test_units_stand_beside_every_number(data):
    assert set(data["units"]) == set(data["labels"]) == set(data["values"])
    units = {plot["key"]: plot["unit"] for plot in data["plots"]}
    assert units["final_radius_um"] == "µm"
    assert units["growth_scale"] == ""


def test_worst_fits_come_first_and_excluded_pulses_not_at_all(data):
    worst = [data["values"]["chi2_reduced"][i] for i in data["worst"]]
    assert worst == sorted(worst, reverse=True)
    named = {data["trace"][i] for i in data["worst"]} | {data["trace"][i] for i, _ in
                                                         data["outliers"]}
    assert "p005.csv" not in named
    assert data["excluded"][index_of(data, "p005.csv")] == ["ann", "window <i>fogged</i>"]
    assert "ann" in data["exclusions"][0]


def test_a_pulse_unlike_its_neighbours_is_found(data):
    assert data["trace"][data["outliers"][0][0]] == "p020.csv"
    assert "final radius" in data["outliers"][0][1]


def test_the_drift_of_the_growth_scale_is_an_alarm(data):
    assert "drifts by" in data["drift_text"]
    assert "humidity" in data["drift_text"]


def test_a_steady_night_raises_no_alarm(ledger, monkeypatch):
    monkeypatch.setattr("scatterfit.report.page_data.drift", lambda _x, y: drift(
        range(len(y)), 1 + 0.01 * np.random.default_rng(5).standard_normal(len(y))))
    assert page_data(open_results(ledger))["drift_text"] == ""


def test_drift_has_an_honest_uncertainty():
    rng = np.random.default_rng(1)
    places = np.arange(300.0)
    ratios = []
    for _ in range(300):
        found = drift(places, rng.standard_normal(300) + 0.002 * places)
        ratios.append((found.change - 0.002 * 299) / found.sigma)
    # A chi distribution of 300 draws has a relative standard deviation of 1/sqrt(600), 4 percent;
    # the uncertainty comes from few blocks and takes the larger of two, so the bar is wide.
    assert 0.8 < np.std(ratios) < 1.2
    assert abs(np.mean(ratios)) < 0.25


def test_single_bad_pulses_do_not_make_a_drift():
    values = 1 + 0.001 * np.random.default_rng(2).standard_normal(200)
    values[190:193] = 9.0
    assert not drift(np.arange(200.0), values).is_certain
    assert list(far_from_neighbours(values)) == [190, 191, 192]


@pytest.mark.parametrize("values", [[], [1.0] * 7, [np.nan] * 50])
def test_few_pulses_say_nothing(values):
    assert drift(range(len(values)), values) is None
    assert far_from_neighbours(values) == {}


def test_equal_values_have_neither_drift_nor_outliers():
    assert drift(np.arange(50.0), np.ones(50)).change == 0
    assert not drift(np.zeros(50), np.ones(50)).is_certain
    assert far_from_neighbours(np.ones(50)) == {}


def test_a_thumbnail_holds_the_shape_of_the_trace():
    import base64

    time = [0.0, 1.0, 2.0, 10.0]
    channel = {"label": "light", "column": "s_V", "time_ms": time,
               "signal_V": [0.0, 1.0, None, 2.0], "fit_V": [None, None, None, None]}
    [part], span = thumbnail([channel], 100)
    assert span == [0.0, 10.0]
    assert (part["lo"], part["hi"]) == (0.0, 2.0)
    assert list(base64.b64decode(part["s"])) == [0, 127, 255, 254]
    assert list(base64.b64decode(part["f"])) == [255] * 4
    assert list(base64.b64decode(part["x"])) == [0, 25, 51, 254]  # uneven times are kept
    assert thumbnail([channel | {"signal_V": [None] * 4}], 100)[0] == []


def test_markup_cannot_leave_the_data():
    hard = {"a": "</script><!--<script>&\u2028", "b": ["@JS@ @DATA@"]}
    text = embedded_json(hard)
    assert not set(text) & set("<>&\u2028")
    assert json.loads(text) == hard


def test_marks_in_names_are_not_filled_in(data):
    page = page_text(data | {"title": "@DATA@ <b>", "summary": "@JS@"})
    assert "<title>@DATA@ &lt;b&gt;</title>" in page
    assert page.count('"use strict"') == 1


def test_an_empty_ledger_has_a_page(tmp_path):
    Ledger(tmp_path / "night.sqlite").close()
    text = write_page(tmp_path / "night.sqlite", tmp_path / "night.html").read_text("utf-8")
    assert "0 pulses" in text


def test_a_page_that_cannot_be_written_is_one_line(ledger, tmp_path, capsys):
    (tmp_path / "file").write_text("x", encoding="utf-8")
    with pytest.raises(PageError, match="cannot be written"):
        write_page(ledger, tmp_path / "file" / "night.html")
    assert main(["report", str(ledger), str(tmp_path / "file" / "night.html")]) == 1
    assert capsys.readouterr().err.count("\n") == 1


def test_the_report_command(ledger, tmp_path, capsys):
    page = tmp_path / "night.html"
    assert main(["report", str(ledger), str(page)]) == 0
    assert capsys.readouterr().err == f"wrote {page}\n"
    assert main(["report", str(tmp_path / "absent.sqlite"), str(page)]) == 1


# How it behaves in a browser


@pytest.fixture(scope="module")
def in_browser(data, tmp_path_factory):
    """Return what a script found while it used the page as a reader would."""
    page = tmp_path_factory.mktemp("browser") / "night.html"
    page.write_text(instrumented(page_text(data), READER), encoding="utf-8")
    return browse(page.as_uri())


READER = """
  const names = () => all("#rows tr td:first-child").map((cell) => cell.textContent);
  const cells = (n) => all(`#rows tr td:nth-child(${n})`).map((cell) => cell.textContent);
  const click = (key) => document.querySelector(`#head [data-key="${key}"]`).click();
  const sorted = () => all("#head th").map((th) => th.getAttribute("aria-sort"));
  const type = async (id, text) => {
    $(id).value = text;
    $(id).dispatchEvent(new Event("input", { bubbles: true }));
    await pause(300);
  };
  $("page-size").value = "1000"; $("page-size").dispatchEvent(new Event("change"));
  found.title = document.title;
  found.count = $("count").textContent;
  found.names = names();
  click("final_radius_um");
  found.up = { radius: cells(4), sorted: sorted() };
  click("final_radius_um");
  found.down = { radius: cells(4), sorted: sorted() };
  click("verdict");
  found.verdicts = cells(2);
  click("trace");
  found.address = location.hash;

  await type("find", "P11");
  found.byText = [$("count").textContent, names()];
  await type("find", "another LOBE");
  found.byReason = $("count").textContent;
  await type("find", "");
  await type("by-code", "no-cloud");
  found.byCode = [$("count").textContent, names().length];
  await type("by-code", "");
  document.querySelector("#by-verdict input[value='0']").click(); await pause(300);
  found.byVerdict = [$("count").textContent, [...new Set(cells(2))].sort()];
  $("clear").click();
  await type("by-column", "final_radius_um");
  await type("low", "1.0100");
  await type("high", "1.0120");
  found.byRange = names();
  found.rememberedAddress = location.hash;
  $("clear").click();
  found.afterClear = $("count").textContent;

  found.markup = { images: document.images.length, bold: all("b").map((b) => b.textContent),
    italic: all("i").length, scripts: document.scripts.length };
  found.excluded = [$("excluded").textContent, all("#rows tr.out").length];
  found.outlier = $("outliers").textContent;
  found.drift = $("drift").textContent;
  found.loaded = performance.getEntriesByType("resource").map((entry) => entry.name);

  const plot = document.querySelector("#plots canvas");
  plot.focus(); press(plot, "ArrowRight"); press(plot, "ArrowRight");
  found.tip = $("tip").textContent;
  press(plot, "Enter");
  found.dialog = [$("detail").open, $("detail-title").textContent];
  press($("detail"), "ArrowRight");
  found.next = $("detail-title").textContent;
  found.values = $("detail-values").textContent;
  found.pen = $("detail-plot").getContext("2d").getImageData(0, 0, $("detail-plot").width, 200)
    .data.some((part) => part > 0);
  $("detail-close").click();
  found.closed = $("detail").open;
  await pause(200);
  found.contact = all("#contact .thumb").length;
  found.drawn = all("#contact .thumb, #worst .thumb").filter((b) => b.drawn).length;
  found.tabbable = all("#head th").every((th) => th.querySelector("button"));
  found.wide = document.documentElement.scrollWidth <= innerWidth;
"""


@needs_browser
def test_the_browser_reports_no_error_and_loads_nothing(in_browser):
    assert in_browser["errors"] == []
    assert in_browser["loaded"] == []
    assert in_browser["title"].startswith("Night of ")


@needs_browser
def test_a_file_name_with_markup_is_shown_as_text(in_browser):
    assert MARKUP in in_browser["names"]
    marks = in_browser["markup"]
    assert (marks["images"], marks["italic"]) == (0, 0)
    assert not any("bold" in text for text in marks["bold"])
    assert "window <i>fogged</i>" in in_browser["excluded"][0]
    assert in_browser["excluded"][1] == 1


@needs_browser
def test_the_table_sorts_both_ways_with_empty_cells_last(in_browser):
    for way, sign, word in (("up", 1, "ascending"), ("down", -1, "descending")):
        texts = in_browser[way]["radius"]
        numbers = [float(text.split(" ")[0]) for text in texts if text]
        assert numbers == sorted(numbers, reverse=sign < 0)
        assert (len(numbers), texts[120:]) == (120, [""] * 30)
        assert in_browser[way]["sorted"].count(word) == 1
        assert in_browser[way]["sorted"][3] == word
    verdicts = [text.split(" ")[0][1:] for text in in_browser["verdicts"]]
    order = ["accepted", "ambiguous", "rejected", "failed"]
    assert verdicts == sorted(verdicts, key=order.index)


@needs_browser
def test_the_table_filters(in_browser):
    assert in_browser["count"] == in_browser["afterClear"] == "150 pulses"
    assert in_browser["byText"][0] == "10 of 150 pulses"
    assert all("p11" in name for name in in_browser["byText"][1])
    assert in_browser["byReason"] == "15 of 150 pulses"
    assert in_browser["byCode"] == ["15 of 150 pulses", 15]
    assert in_browser["byVerdict"][0] == "45 of 150 pulses"
    assert not any("accepted" in text for text in in_browser["byVerdict"][1])
    # p103 and p113 show no cloud, p109 and p119 failed; p117 and p107 are ambiguous, of any radius
    assert {"p100.csv", "p101.csv", "p120.csv"} <= set(in_browser["byRange"])
    assert not {"p099.csv", "p121.csv", "p103.csv", "p109.csv"} & set(in_browser["byRange"])


@needs_browser
def test_the_keyboard_reaches_everything(in_browser):
    # The second pulse of the night in the first plot, opened with Enter, then its neighbour.
    assert in_browser["tip"].startswith("p001.csv: final radius 1.0001 ± 0.0010 µm")
    assert in_browser["dialog"] == [True, "p001.csv"]
    assert in_browser["next"] == "p002.csv"
    assert "radius" in in_browser["values"]
    assert in_browser["pen"]
    assert not in_browser["closed"]
    assert in_browser["tabbable"]


@needs_browser
def test_small_pictures_are_drawn_as_they_come_into_view(in_browser):
    assert in_browser["contact"] == COUNT
    assert 0 < in_browser["drawn"] < COUNT


@needs_browser
def test_the_page_is_not_wider_than_the_window(in_browser):
    assert in_browser["wide"]


@needs_browser
def test_numbers_are_rounded_by_the_one_rule(data, tmp_path):
    rng = np.random.default_rng(8)
    values = (10 ** rng.uniform(-7, 9, 300) * rng.choice([-1, 1], 300)).tolist()
    sigmas = [abs(v) * 10 ** float(rng.uniform(-5, 0.5)) for v in values]
    pairs = [*zip(values, sigmas, strict=True), (1.79245, 0.00132), (0.5, 0.25), (1.0, 0.0996),
             (99.95, 0.995), (5842.7, 117.0), (0.0, 1.0), (2.0, 0.0), (269.073, 0.0),
             (1e-9, 3.0)]
    script = (f"found.pairs = {json.dumps(pairs)}.map(([v, s]) => scatterfit.quantity(v, s));"
              f"found.single = {json.dumps(values)}.map((v) => scatterfit.number(v));"
              "found.kept = [location.hash, document.querySelector('#rows .open').textContent,"
              "  $('find').value, $('count').textContent];")
    page = tmp_path / "night.html"
    page.write_text(instrumented(page_text(data), script), encoding="utf-8")
    found = browse(f"{page.as_uri()}#sort=-final_radius_um&find=p02")
    assert found["errors"] == []
    assert found["pairs"] == [format_quantity(value, sigma) for value, sigma in pairs]
    assert found["single"] == [format_number(value) for value in values]
    # The address brings a reader back to the same sort and filter.
    assert found["kept"][0] == "#sort=-final_radius_um&find=p02"
    assert found["kept"][1] == "p020.csv"
    assert found["kept"][2:] == ["p02", "10 of 150 pulses"]


@needs_browser
def test_news_come_in_without_losing_sort_and_place(data):
    """A watch has added a pulse: it shows, while sort, filter, open pulse and place stay."""
    script = """
      document.querySelector('#head [data-key="final_radius_um"]').click();
      document.querySelectorAll("#rows .open")[3].click();
      scrollTo({ top: 700, behavior: "instant" });
      found.before = [$("count").textContent, $("detail-title").textContent, scrollY];
      for (let i = 0; i < 100 && $("count").textContent === "150 pulses"; i += 1) await pause(100);
      found.after = [$("count").textContent, $("detail-title").textContent, scrollY];
      found.address = location.hash;
      found.first = document.querySelector("#rows .open").textContent;
    """
    live = data | {"live_seconds": 0.3}
    pages = {False: instrumented(page_text(live), script), True: page_text(_with_one_more(live))}
    asked = []

    class Handler(http.server.BaseHTTPRequestHandler):
        def do_GET(self):
            asked.append(self.path)
            body = pages["?" in self.path].encode()
            self.send_response(200 if "night.html" in self.path else 404)
            self.send_header("Content-Type", "text/html; charset=utf-8")
            self.send_header("Content-Length", str(len(body)))
            self.end_headers()
            self.wfile.write(body)

        def log_message(self, *_words):
            pass

    with http.server.ThreadingHTTPServer(("127.0.0.1", 0), Handler) as server:
        threading.Thread(target=server.serve_forever).start()
        try:
            found = browse(f"http://127.0.0.1:{server.server_port}/night.html")
        finally:
            server.shutdown()
    assert [error for error in found["errors"] if "favicon" not in error] == []
    assert found["before"][0] == "150 pulses"
    assert found["after"] == ["151 pulses", *found["before"][1:]]
    assert found["before"][2] > 0
    assert found["address"] == "#sort=final_radius_um"
    assert found["first"] == "zz-new.csv"  # the smallest radius
    assert any("?" in path for path in asked)


def _with_one_more(data):
    """Return a page's data with one more pulse, of the smallest radius."""
    more = dict(data)
    for key in ("verdict", "reasons", "recorded", "excluded", "thumbs", "spans", "place"):
        more[key] = [*data[key], data[key][0]]
    more["trace"] = [*data["trace"], "zz-new.csv"]
    for key in ("values", "sigmas"):
        more[key] = {name: [*cells, cells[0]] for name, cells in data[key].items()}
    more["values"]["final_radius_um"][-1] = 0.5
    return more
