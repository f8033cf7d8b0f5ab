"""Verdicts in the XML form that continuous integration reads: a suite a kernel on a core, a case a claim.

The form is the common subset of what build servers accept (``testsuites/testsuite/testcase`` with ``failure`` and
``skipped``): common practice, no source.
"""

from __future__ import annotations

import xml.etree.ElementTree as Tree
from collections.abc import Sequence

from vliwsim.regression.claims import Verdict


def to_xml(verdicts: Sequence[Verdict]) -> bytes:
    """The XML file of some verdicts."""
    claims = [claim for verdict in verdicts for claim in verdict.claims]
    counts = {"tests": len(claims), "failures": sum(c.held is False for c in claims)}
    counts["skipped"] = sum(c.held is None for c in claims)
    root = Tree.Element("testsuites", {"name": "vliwsim", **_texts(counts)})
    for verdict in verdicts:
        own = {
            "tests": len(verdict.claims),
            "failures": sum(c.held is False for c in verdict.claims),
            "skipped": sum(c.held is None for c in verdict.claims),
        }
        time = f"{verdict.seconds:.3f}"
        suite = Tree.SubElement(root, "testsuite", {"name": _plain(verdict.title), **_texts(own), "time": time})
        for claim in verdict.claims:
            where = {"classname": _plain(verdict.title), "name": _plain(claim.title), "file": _plain(verdict.source)}
            if claim.lines:
                where["line"] = str(claim.lines[0])
            case = Tree.SubElement(suite, "testcase", where)
            if claim.held is False:
                failure = Tree.SubElement(case, "failure", {"message": _plain(claim.says)})
                failure.text = _plain(claim.detail)
            elif claim.held is None:
                Tree.SubElement(case, "skipped", {"message": _plain(claim.says)})
        notes = "\n".join(verdict.notes)
        if notes:
            Tree.SubElement(suite, "system-out").text = _plain(notes)
    Tree.indent(root)
    return Tree.tostring(root, encoding="utf-8", xml_declaration=True) + b"\n"


def _texts(numbers: dict[str, int]) -> dict[str, str]:
    return {name: str(number) for name, number in numbers.items()}


def _plain(text: str) -> str:
    """Only the characters that XML 1.0 can hold (section 2.2 of the recommendation)."""

    def fits(c: str) -> bool:
        return c in "\t\n\r" or "\x20" <= c <= "\ud7ff" or "\ue000" <= c <= "\ufffd" or c >= "\U00010000"

    return "".join(c if fits(c) else "\N{REPLACEMENT CHARACTER}" for c in text)
