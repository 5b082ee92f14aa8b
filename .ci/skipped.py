"""Which tests were skipped and why; fails where one was skipped that must run.

Reads the JUnit file of a test run. A skip is excused where what the test needs is not on this machine:
open data beside the repository, or a browser. Any other skip of a required test is a failure, and so is a
required part of the tests of which nothing ran and passed.
"""

from __future__ import annotations

import re
import shutil
import sys
from pathlib import Path
from xml.etree import ElementTree

REQUIRED = (
    "tests.cli",
    "tests.nose",
    "tests.report",
    "tests.sizing",
    "tests.study",
    "tests.test_borders",
    "tests.test_surface",
    "tests.verify.test_verify_reference",
    "tests.verify.test_verify_two_buses",
)
"""Parts of the tests, by the beginning of their names, without which a run shows nothing."""

BROWSERS = ("chromium", "chromium-browser", "google-chrome-stable", "google-chrome")
SHARED = Path(__file__).resolve().parents[2] / "shared"


def excused(reason: str) -> bool:
    """Whether the reason of a skip names something that is truly not here."""
    found = re.search(r"\.\./shared/([\w./-]+)", reason)
    if found:
        return not (SHARED / found.group(1).rstrip(".")).exists()
    if "beside the repository" in reason:
        return not (SHARED / "data").exists()
    if "Chromium" in reason:
        return not any(shutil.which(name) for name in BROWSERS)
    return False


def main(path: Path) -> int:
    """Print every skip with its reason and return the exit code."""
    if not path.exists():
        print("there is no record of a test run")
        return 1
    passed: set[str] = set()
    skipped: list[tuple[str, str]] = []
    for case in ElementTree.parse(path).iter("testcase"):
        name = f"{case.get('classname')}.{case.get('name')}"
        skip = case.find("skipped")
        if skip is not None:
            skipped.append((name, skip.get("message") or ""))
        elif case.find("failure") is None and case.find("error") is None:
            passed.add(name)
    faults = []
    for name, reason in skipped:
        wrong = name.startswith(REQUIRED) and not excused(reason)
        print(f"skipped: {name}: {reason}{'  <- required' if wrong else ''}")
        if wrong:
            faults.append(name)
    for part in REQUIRED:
        if not any(name.startswith(part) for name in passed):
            print(f"nothing of {part} ran and passed")
            faults.append(part)
    print(f"{len(passed)} passed, {len(skipped)} skipped, {len(faults)} required ones missing")
    return 1 if faults else 0


if __name__ == "__main__":
    sys.exit(main(Path(sys.argv[1])))
