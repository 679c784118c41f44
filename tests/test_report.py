"""The files of a report: what a browser, an HTML parser and a JUnit reader make of them."""

from __future__ import annotations

import base64
import copy
import io
import json
import re
import xml.etree.ElementTree as ElementTree
from html import escape

import h5py
import html5lib
import junitparser
import numpy as np
import pytest
from PIL import Image

from fieldmover.diagnostics import diagnose
from fieldmover.diagnostics.limits import flattened
from fieldmover.errors import OutputError
from fieldmover.forms import FaceFlux
from fieldmover.grids import cartesian_grid
from fieldmover.jobs import details
from fieldmover.jobs.demo import job_text, write_snapshot
from fieldmover.jobs.names import FIELD, known
from fieldmover.jobs.verdicts import figures_of
from fieldmover.jobs.worker import Options, work
from fieldmover.report.charts import Axis, bars, histogram, lines
from fieldmover.report.figures import Picture, Scale, _png
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
    text = job_text().replace("cells = 128", "cells = 16").replace("energy_change = 0.02", "energy_change = 1e-9")
    (place / "ring.toml").write_text(text + REGIONS, encoding="utf-8")
    assert work(Options("move", str(place / "ring.toml"), quiet=True)) == 3
    return place / "ring-cartesian-report"


@pytest.fixture
def report(folder):
    return json.loads((folder / "report.json").read_text())


# -- the numbers --------------------------------------------------------------------------------------------


def test_the_names_are_those_that_are_measured(report):
    names, measured = known(["density"], ["ring", "core", "box"]), figures_of(report)
    assert set(measured) <= set(names)
    asked_for = ("against.", "helicity.", "curved.")  # by the command line, and by the job
    assert {name for name in names if not name.startswith(asked_for)} == set(measured)
    grid = cartesian_grid([0, 1], [0, 1], [0, 1])
    zero = FaceFlux(grid, (np.zeros((2, 1, 1)), np.zeros((1, 2, 1)), np.zeros((1, 1, 2))))
    assert tuple(flattened(diagnose(zero).as_dict())) == FIELD


def test_every_figure_has_a_meaning():
    for name in known(["density"], ["core"], ["lid"]):
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
    assert details.histogram(np.array([np.nan, np.inf, 0.0]))["cells"][-1] == 2


def test_the_spectrum_holds_all_energy_of_the_cells(report):
    assert list(report["spectra"]) == ["stored"]  # the source is no Cartesian grid
    total = report["fields"]["stored"]["energy"]["total"]
    assert sum(report["spectra"]["stored"]["energy"]) == pytest.approx(total, rel=0.2)  # of means over cells


def test_there_is_no_view_unasked(folder):
    assert not list(folder.parent.glob("*.xdmf"))
    with h5py.File(folder.parent / "ring-cartesian.h5") as file:
        assert "VTKHDF" not in file


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
    assert len(found.all("image")) == 20  # maps and their colour bars
    assert found.root.get("lang") == "en"


def test_maps_full_of_detail_do_not_make_it_large(report, monkeypatch):
    """Maps of noise, which no format compresses, where there is room for a third of them."""
    pixels = np.random.default_rng(1).integers(0, 256, (200, 200, 1), dtype=np.uint8)
    grey = _png(np.repeat(pixels, 3, axis=2))
    picture = Picture(
        "y = 0", "noise", "up to 1", "Map of noise", b"", grey, grey, (0.0, 1.0, 0.0, 1.0),
        ("x", "z"), Scale(0.1, 1.0, "cividis", "|B|"),
    )  # fmt: skip
    maps = re.findall(r'base64,([^"]+)"', page(report, [picture] * 2))[::2]
    assert base64.b64decode(maps[0]) == grey  # two have room
    monkeypatch.setattr("fieldmover.report.page.ROOM", 2 * len(grey) // 3)
    small = [base64.b64decode(data) for data in re.findall(r'base64,([^"]+)"', page(report, [picture] * 2))[::2]]
    assert 0.3 < sum(map(len, small)) / (2 * len(grey)) < 1 / 3
    assert Image.open(io.BytesIO(small[0])).size == (110, 110)


def test_the_page_leads_with_verdict_and_limits(html, report):
    found = Page(html)
    assert "Limits exceeded: energy_change (2 of 3 limits kept)" in found.text(found.all("header")[0])
    text = found.text(found.all("main")[0])
    order = [
        "Limits", "1e-09", "What was kept and lost", "lost to cleaning", "lost to moving",
        "lost to storing", "Plane y = 0", "Where the divergence sits", "Profile and spectrum",
        "Further figures", "Removal of monopoles", "What was read, written and assumed",
        report["files"]["source"]["sha256"], report["files"]["target"]["sha256"],
        "ghosts", "gaussian", "heaviside-lorentz", report["versions"]["numpy"], 'kind = "spherical"',
    ]  # fmt: skip
    places = [text.find(words) for words in order]
    assert -1 not in places
    assert places[:12] == sorted(places[:12])


def test_pictures_and_charts_have_texts_with_numbers(html):
    found = Page(html)
    drawings = found.all("svg")
    texts = [drawing.get("aria-label") for drawing in drawings]
    assert len(texts) == 15
    assert {drawing.get("role") for drawing in drawings} == {"img"}
    assert all(re.search(r"\d", text) and len(text) > 40 for text in texts)
    for region in (e for e in found.root.iter() if e.get("class") == "scroll"):
        assert (region.get("tabindex"), region.get("role")) == ("0", "region")
        assert region.get("aria-label")


def test_what_a_job_says_stays_text(report):
    report["title"] = HOSTILE
    report["job"]["text"] = f"title = {HOSTILE}"
    report["limits"][0]["name"] = "divergence"
    scale = Scale(0.1, 1.0, "cividis", HOSTILE)
    picture = Picture("y = 0", HOSTILE, HOSTILE, HOSTILE, *[b"\x89PNG"] * 3, (0.0, 1.0, 0.0, 1.0), ("x", "z"), scale)
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


# -- JUnit and Markdown -------------------------------------------------------------------------------------


def test_junit_as_a_reader_of_that_format_sees_it(folder, report):
    found = junitparser.JUnitXml.fromfile(str(folder / "report.xml"))
    (suite,) = list(found)
    cases = {case.name: case for case in suite}
    assert list(cases) == ["divergence", "energy_change", "mass_change"]
    assert (suite.tests, suite.failures, suite.errors) == (3, 1, 0)
    assert [name for name, case in cases.items() if not case.is_passed] == ["energy_change"]
    (failure,) = cases["energy_change"].result
    for words in ("energy_change: found", "at most 1e-09", meaning("energy_change")):
        assert words in failure.text
    assert suite.time == pytest.approx(report["seconds"], abs=1e-3)


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
    values = {"source": (1.0, "0.00812345 (+1.00e-16)"), "stored": (0.0, "0"), "moved": (-0.5, "-0.5")}
    svg = ElementTree.fromstring(bars(values, "text"))
    for text in svg.iter("text"):
        width = 7.0 * len(text.text)  # twelve pixels high, so about so wide
        assert text.get("text-anchor") == "end" or float(text.get("x")) + width < 440


def test_bars_are_as_long_as_their_values():
    svg = ElementTree.fromstring(bars({"a": (3.0, "3"), "b": (-1.0, "-1"), "c": (0.0, "0")}, "text"))
    a, b, c = [(float(bar.get("x")), float(bar.get("width"))) for bar in svg.iter("rect")]
    assert a[1] == pytest.approx(3 * b[1], rel=1e-2)
    assert c[1] == 0
    assert b[0] + b[1] == pytest.approx(a[0])  # both start at zero
    assert c[0] == a[0]


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
        assert_inside(svg)
    assert lines({"a": [(0, 1)]}, ("x", "y"), "nothing above 0") == "<p>nothing above 0</p>"
    assert escape("<") in lines({"<": [(1, 1)]}, ("x", "y"), "t")


def assert_inside(svg):
    numbers = [float(n) for path in re.findall(r' d="([^"]*)"', svg) for n in re.findall(r"-?[\d.]+", path)]
    assert min(numbers) >= 0
    assert max(numbers) <= 440


def test_a_histogram_stands_on_its_bins():
    """Three bins, one of them empty: two blocks, the higher one twice as many decades above half a cell."""
    svg = histogram({"a": [(0.0, 1e-17, 50.0), (1e-17, 1e-16, 0.0), (1e-16, 1e-15, 5.0)]}, ("x", "y"), "text")
    assert_inside(svg)
    (path,) = [p for p in re.findall(r'class="s0" d="([^"]*)"', svg)]
    first, second = (part.split() for part in path.split("M")[1:])
    base = float(first[1])
    assert float(second[1]) == base
    heights = [base - float(part[3]) for part in (first, second)]
    assert heights[0] == pytest.approx(2 * heights[1], abs=0.2)
    width = float(first[4][1:]) - float(first[0])
    assert width == pytest.approx(float(second[4][1:]) - float(second[0]), abs=0.2)
    assert histogram({"a": [(0.0, 1.0, 0.0)]}, ("x", "y"), "no cells") == "<p>no cells</p>"


@pytest.mark.parametrize("ends", [(1e-17, 3e-5), (0.15, 0.6), (2e-5, 2.1e-5), (1.0, 1.0), (1e-300, 1e300)])
def test_a_logarithmic_axis_has_ticks_within_its_ends(ends):
    for tight in (False, True):
        ticks = Axis(list(ends), True, tight).ticks()
        assert all(-1e-9 <= part <= 1 + 1e-9 for part, _ in ticks)
        assert len({text for _, text in ticks}) == len(ticks) <= 8
        assert ticks or tight
