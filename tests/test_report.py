"""The files of a report: what a browser, an HTML parser and a JUnit reader make of them."""

from __future__ import annotations

import copy
import json
import re
import shutil
import subprocess
import xml.etree.ElementTree as ElementTree
from html import escape
from pathlib import Path

import html5lib
import junitparser
import numpy as np
import pytest

from fieldmover.diagnostics import diagnose
from fieldmover.diagnostics.limits import flattened
from fieldmover.errors import OutputError
from fieldmover.forms import FaceFlux
from fieldmover.grids import cartesian_grid
from fieldmover.jobs.demo import job_text, write_snapshot
from fieldmover.jobs.details import histogram
from fieldmover.jobs.names import AGAINST, FIELD, known
from fieldmover.jobs.verdicts import figures_of
from fieldmover.jobs.worker import Options, work
from fieldmover.report.charts import bars, lines
from fieldmover.report.figures import Picture
from fieldmover.report.junit import junit
from fieldmover.report.meaning import meaning
from fieldmover.report.page import page
from fieldmover.report.summary import CAP, append_step_summary, markdown
from fieldmover.report.write import write_report

HOSTILE = '<script>alert(1)</script> & "quotes" \' | `ticks` \x07'
REGIONS = """
[regions]
ring = { centre = [0, 0, 0], radii = [3, 5] }
core = { radius = 2.5 }
box  = { from = [-1, -1, 2], to = [1, 1, 4] }
"""


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """The report of a small hand-over with regions; one limit is exceeded."""
    place = tmp_path_factory.mktemp("job")
    write_snapshot(place / "ring.h5", (24, 16, 32))
    text = (
        job_text()
        .replace("cells = 128", "cells = 16")
        .replace("energy_change = 0.02", "energy_change = 1e-9")
    )
    (place / "ring.toml").write_text(text + REGIONS, encoding="utf-8")
    assert work(Options("move", str(place / "ring.toml"), quiet=True)) == 3
    return place / "ring-cartesian-report"


@pytest.fixture
def report(folder):
    return json.loads((folder / "report.json").read_text())


# -- the numbers --------------------------------------------------------------------------------------------


def test_the_names_are_those_that_are_measured(report):
    measured = figures_of(report)
    assert set(measured) <= {
        *known(["density"], ["ring", "core", "box"]),
        "coverage.cells",
        "coverage.whole",
        "coverage.cut",
    }
    missing = set(known(["density"], ["ring", "core", "box"])) - set(measured)
    assert missing == {f"against.{name}" for name in AGAINST}
    grid = cartesian_grid([0, 1], [0, 1], [0, 1])
    zero = FaceFlux(grid, (np.zeros((2, 1, 1)), np.zeros((1, 2, 1)), np.zeros((1, 1, 2))))
    assert tuple(flattened(diagnose(zero).as_dict())) == FIELD


def test_every_figure_has_a_meaning():
    for name in known(["density"], ["core"]):
        assert meaning(name).endswith(".")


def test_losses_add_up_to_the_change(report):
    figures, covered = report["figures"], report["energy_covered"]
    assert list(covered) == ["source", "cleaned", "moved", "stored"]
    assert sum(figures["energy_lost"].values()) == pytest.approx(-figures["energy_change"], abs=1e-14)
    lost = (covered["cleaned"] - covered["moved"]) / covered["source"]
    assert figures["energy_lost"]["moving"] == pytest.approx(lost)
    assert sum(report["profile"]["energy"]["stored"]) == pytest.approx(covered["stored"])


def test_regions_hold_parts_of_the_whole(report):
    regions, whole = report["regions"], report["fields"]["stored"]
    assert set(regions) == {"ring", "core", "box"}
    assert 0 < regions["box"]["energy"] < regions["ring"]["energy"] < whole["energy"]["total"]
    assert all(found["divergence"] <= whole["divergence"]["linf"] for found in regions.values())
    assert regions["core"]["strength"] == pytest.approx(whole["strength"]["largest"])
    assert abs(regions["ring"]["energy_change"]) < 0.3


def test_histograms_count_every_cell_and_the_worst_come_first(report):
    for step, found in report["divergences"].items():
        assert sum(found["histogram"]["cells"]) == report["fields"][step]["cells"]
        worst = [cell["relative"] for cell in found["worst_cells"]]
        assert len(worst) == 10
        assert worst == sorted(worst, reverse=True)
        assert worst[0] == report["fields"][step]["divergence"]["linf"]


def test_a_histogram_of_values_that_are_no_numbers():
    assert histogram(np.array([np.nan, np.inf, 0.0]))["cells"][-1] == 2


def test_the_spectrum_holds_all_energy_of_the_cells(report):
    assert list(report["spectra"]) == ["stored"]  # the source is no Cartesian grid
    total = report["fields"]["stored"]["energy"]["total"]
    assert sum(report["spectra"]["stored"]["energy"]) == pytest.approx(total, rel=0.2)  # of means over cells


# -- the page -----------------------------------------------------------------------------------------------


class Page:
    """A page as html5lib's strict parser sees it."""

    def __init__(self, text: str) -> None:
        parser = html5lib.HTMLParser(strict=True, namespaceHTMLElements=False)
        self.root = parser.parse(text)

    def all(self, tag: str) -> list:
        return [e for e in self.root.iter() if isinstance(e.tag, str) and e.tag.rsplit("}", 1)[-1] == tag]

    def text(self, element=None) -> str:
        return " ".join("".join((self.root if element is None else element).itertext()).split())


@pytest.fixture
def html(folder):
    return (folder / "report.html").read_text(encoding="utf-8")


def test_the_page_is_whole_and_alone(folder, html):
    found = Page(html)
    assert len(html.encode()) < 3_000_000
    assert found.all("script") == []
    assert found.all("link") == []
    assert not re.search(r"""(?:src|href|url)\s*[=(]\s*["']?(?!data:image/png;base64,|#)[a-z/]""", html)
    ids = [e.get("id") for e in found.root.iter() if e.get("id")]
    assert len(ids) == len(set(ids))
    for link in found.all("a"):
        assert link.get("href")[1:] in ids
    assert [h.tag for h in found.root.iter() if h.tag in ("h1", "h2")].count("h1") == 1
    assert len(found.all("img")) == 10
    assert found.root.get("lang") == "en"


def test_the_page_leads_with_verdict_and_limits(html, report):
    found = Page(html)
    assert "Limits exceeded: energy_change (2 of 3 limits kept)" in found.text(found.all("header")[0])
    text = found.text(found.all("main")[0])
    order = [
        "Limits", "1.000e-09", "What was kept and lost", "lost to cleaning", "lost to moving",
        "lost to storing", "Plane y = 0", "Where the divergence sits", "Profile and spectrum",
        "What was read, written and assumed", report["files"]["source"]["sha256"], report["files"]["target"]["sha256"],
        "ghosts", "gaussian", "heaviside-lorentz", report["versions"]["numpy"], 'kind = "spherical"',
    ]  # fmt: skip
    places = [text.find(words) for words in order]
    assert -1 not in places
    assert places[:10] == sorted(places[:10])


def test_pictures_and_charts_have_texts_with_numbers(html):
    found = Page(html)
    texts = [image.get("alt") for image in found.all("img")] + [
        svg.get("aria-label") for svg in found.all("svg")
    ]
    assert len(texts) == 14
    assert all(re.search(r"\d", text) and len(text) > 40 for text in texts)
    for region in (e for e in found.root.iter() if e.get("class") == "scroll"):
        assert (region.get("tabindex"), region.get("role")) == ("0", "region")
        assert region.get("aria-label")


def test_what_a_job_says_stays_text(report):
    report["title"] = HOSTILE
    report["job"]["text"] = f"title = {HOSTILE}"
    report["limits"][0]["name"] = "divergence"
    picture = Picture("y = 0", HOSTILE, b"\x89PNG", HOSTILE)
    found = Page(page(report, [picture]))
    assert found.all("script") == []
    assert found.text(found.all("h1")[0]) == HOSTILE.replace("\x07", "\ufffd")
    assert "<script>" not in markdown(report)
    assert ElementTree.fromstring(junit(report)).find("testsuite").get("name").startswith("<script>")


@pytest.mark.parametrize("limits", [True, False])
def test_a_page_of_little(report, limits):
    """A check of a source without a target."""
    report |= {
        "regions": {},
        "fluid": {},
        "energy_covered": {},
        "coverage": None,
        "profile": None,
        "spectra": {},
    }
    report |= {"cleaning": None, "divergences": {}, "limits": report["limits"] if limits else []}
    text = Page(page(report)).text()
    assert ("no limits were set" in text.lower()) == (not limits)
    assert "Pictures" not in text


# -- in a browser -------------------------------------------------------------------------------------------

BROWSER = next(
    (path for name in ("chromium", "chromium-browser", "google-chrome") if (path := shutil.which(name))), None
)
PROBE = """<script>addEventListener("load", () => {
  const root = document.documentElement;
  const loose = [...document.querySelectorAll("body *")].filter(e =>
    e.getBoundingClientRect().right > root.clientWidth + 1 && !e.closest(".scroll, pre, svg, .skip"));
  parent.postMessage(JSON.stringify({
    width: innerWidth, overflow: root.scrollWidth - root.clientWidth, loose: loose.map(e => e.outerHTML.slice(0, 80)),
    images: [...document.images].map(i => i.complete && i.naturalWidth > 300),
    back: getComputedStyle(document.body).backgroundColor,
  }), "*");
});</script>"""
FRAME = """<!DOCTYPE html><html><head><title>-</title><style>:root {{ color-scheme: light dark; }}
iframe {{ border: 0; width: {width}px; height: 800px; }}</style><script>
onmessage = event => {{ document.documentElement.dataset.found = event.data; }};
</script></head><body><iframe src="probed.html"></iframe></body></html>"""


def browse(path: Path, *options: str) -> subprocess.CompletedProcess:
    command = [
        BROWSER, "--headless", "--no-sandbox", "--disable-gpu", "--hide-scrollbars", "--enable-logging=stderr",
        "--window-size=1500,900", f"--user-data-dir={path.parent / 'profile'}", "--virtual-time-budget=5000", *options,
        "--dump-dom", path.as_uri(),
    ]  # fmt: skip
    return subprocess.run(command, capture_output=True, text=True, timeout=60, check=True)


@pytest.mark.skipif(BROWSER is None, reason="no Chromium here")
@pytest.mark.parametrize("width", [400, 1400])
@pytest.mark.parametrize("dark", [False, True])
def test_the_page_in_a_browser(html, tmp_path, width, dark):
    """The page as it is leaves no message; a copy with a probe in a frame of some width tells how it lies there."""
    (tmp_path / "report.html").write_text(html, encoding="utf-8")
    scheme = f"--blink-settings=preferredColorScheme={0 if dark else 1}"
    assert "CONSOLE" not in browse(tmp_path / "report.html", scheme).stderr
    probed = re.sub(r"<meta http-equiv=[^>]*>", "", html).replace("</body>", f"{PROBE}</body>")
    (tmp_path / "probed.html").write_text(probed, encoding="utf-8")
    (tmp_path / "frame.html").write_text(FRAME.format(width=width), encoding="utf-8")
    dom = browse(tmp_path / "frame.html", scheme).stdout
    found = json.loads(Page(dom).root.get("data-found"))
    assert found["width"] == width
    assert (found["overflow"], found["loose"]) == (0, [])
    assert found["images"] == [True] * 10
    assert found["back"] == ("rgb(20, 24, 29)" if dark else "rgb(255, 255, 255)")


# -- JUnit and Markdown -------------------------------------------------------------------------------------


def test_junit_as_a_reader_of_that_format_sees_it(folder, report):
    found = junitparser.JUnitXml.fromfile(str(folder / "report.xml"))
    (suite,) = list(found)
    cases = {case.name: case for case in suite}
    assert list(cases) == ["divergence", "energy_change", "mass_change"]
    assert (suite.tests, suite.failures, suite.errors) == (3, 1, 0)
    assert [name for name, case in cases.items() if not case.is_passed] == ["energy_change"]
    (failure,) = cases["energy_change"].result
    for words in ("energy_change: found", "at most 1.000e-09", meaning("energy_change")):
        assert words in failure.text
    assert suite.time == pytest.approx(report["seconds"], abs=1e-3)


def test_junit_has_only_what_its_schema_allows(folder):
    """Elements, their order and attributes as in the schema that CI servers publish (junit-10.xsd; from memory)."""
    root = ElementTree.parse(folder / "report.xml").getroot()
    allowed = {
        "testsuites": {"name", "time", "tests", "failures", "disabled", "errors"},
        "testsuite": {
            "name",
            "tests",
            "failures",
            "errors",
            "time",
            "skipped",
            "timestamp",
            "hostname",
            "id",
        },
        "testcase": {"name", "classname", "time", "status", "assertions", "class", "file", "line", "group"},
        "failure": {"message", "type"},
        "system-out": set(),
    }
    children = {"testsuites": {"testsuite"}, "testsuite": {"testcase"}, "testcase": {"failure", "system-out"}}
    for element in root.iter():
        assert set(element.attrib) <= allowed[element.tag]
        assert {child.tag for child in element} <= children.get(element.tag, set())
    required = {"testsuite": {"name", "tests", "failures", "errors"}, "testcase": {"name", "classname"}}
    for tag, needed in required.items():
        assert all(needed <= set(element.attrib) for element in root.iter(tag))


def test_the_summary_is_a_table(folder):
    text = (folder / "summary.md").read_text(encoding="utf-8")
    assert text.startswith("## ❌ limits exceeded: energy\\_change\n")
    rows = [line.split(" | ") for line in text.splitlines() if line.startswith("| ")]
    assert len(rows) > 12
    assert "| divergence |" in text


def test_the_summary_goes_to_the_service_and_never_past_its_cap(tmp_path, monkeypatch, report):
    path = tmp_path / "steps.md"
    path.write_text("before\n", encoding="utf-8")
    monkeypatch.setenv("GITHUB_STEP_SUMMARY", str(path))
    write_report(tmp_path / "here", report, [])
    assert path.read_text(encoding="utf-8") == "before\n" + (tmp_path / "here" / "summary.md").read_text(
        encoding="utf-8"
    )
    append_step_summary("é" * CAP)
    append_step_summary("more")
    assert CAP - 1 <= path.stat().st_size <= CAP
    path.read_text(encoding="utf-8")  # no half character
    monkeypatch.setenv("GITHUB_STEP_SUMMARY", str(tmp_path))
    with pytest.raises(OutputError, match="cannot be written"):
        append_step_summary("text")


def test_a_report_holds_finite_numbers_only(tmp_path, report):
    bad = copy.deepcopy(report)
    bad["figures"]["divergence"] = float("nan")
    with pytest.raises(ValueError, match="not JSON compliant"):
        write_report(tmp_path, bad, [])
    assert report["schema"] == {"name": "fieldmover report", "version": 2}


def test_writing_replaces_what_was_there(tmp_path, report):
    for title in ("one", "two"):
        write_report(tmp_path, {**report, "title": title}, [])
    assert sorted(path.name for path in tmp_path.iterdir()) == [
        "report.html",
        "report.json",
        "report.xml",
        "summary.md",
    ]
    assert "<h1>two</h1>" in (tmp_path / "report.html").read_text()


# -- charts -------------------------------------------------------------------------------------------------


def test_bars_leave_room_for_their_numbers():
    svg = ElementTree.fromstring(
        bars({"source": (1.0, "0.00812345 (+1.00e-16)"), "stored": (0.0, "0")}, "text")
    )
    for text in svg.iter("text"):
        width = 7.0 * len(text.text)  # twelve pixels high, so about so wide
        assert text.get("text-anchor") == "end" or float(text.get("x")) + width < 440


def test_curves_lie_in_their_frame_whatever_the_numbers():
    cases = [
        ({"a": [(1e-300, 1e300), (1, 1)]}, (True, True)),
        ({"a": [(0, 0), (-1, 2)]}, (False, False)),
        ({"a": [(5, 5)]}, (True, False)),
        ({"a": [(1, 2), (0, 3)], "b": []}, (True, True)),
    ]
    for series, log in cases:
        svg = lines(series, ("x", "y"), "text", log)
        ElementTree.fromstring(svg)
        numbers = [
            float(n) for path in re.findall(r' d="([^"]*)"', svg) for n in re.findall(r"-?[\d.]+", path)
        ]
        assert min(numbers) >= 0
        assert max(numbers) <= 440
    assert lines({"a": [(0, 1)]}, ("x", "y"), "nothing above 0") == "<p>nothing above 0</p>"
    assert escape("<") in lines({"<": [(1, 1)]}, ("x", "y"), "t")
