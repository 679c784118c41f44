"""The verdicts as JUnit XML: one test case for each limit, so that a CI server lists them like tests."""

from __future__ import annotations

import xml.etree.ElementTree as ElementTree
from typing import Any

from fieldmover.report.formats import legal
from fieldmover.report.meaning import meaning
from fieldmover.report.text import allowed, found_text


def junit(report: dict[str, Any]) -> str:
    """The text of report.xml.

    What a reader needs stands in the body of a failure, because some CI servers do not show its attributes.
    A job without limits has no test cases.

    Parameters
    ----------
    report : dict
        As in report.json.
    """
    limits = report["limits"]
    failures = sum(1 for limit in limits if not limit["passed"])
    counts = {"tests": str(len(limits)), "failures": str(failures), "errors": "0"}
    time = f"{report['seconds']:.3f}"
    root = ElementTree.Element("testsuites", {"name": "fieldmover", **counts, "time": time})
    title = legal(report["title"] or f"fieldmover {report['command']}")
    suite = ElementTree.SubElement(root, "testsuite", {"name": title, **counts, "skipped": "0", "time": time})
    for limit in limits:
        attributes = {"name": limit["name"], "classname": f"fieldmover.{report['command']}", "time": "0"}
        case = ElementTree.SubElement(suite, "testcase", attributes)
        said = legal(f"{limit['name']}: found {found_text(limit)}; allowed {allowed(limit)}. {meaning(limit['name'])}")
        if limit["passed"]:
            ElementTree.SubElement(case, "system-out").text = said
        else:
            ElementTree.SubElement(case, "failure", {"message": said, "type": "limit"}).text = said
    ElementTree.indent(root)
    return '<?xml version="1.0" encoding="UTF-8"?>\n' + ElementTree.tostring(root, encoding="unicode") + "\n"
