"""Reads the JUnit file that CTest wrote: says what failed and what was skipped and why, and prints
the counts `passed failed skipped` on the last line."""

import re
import sys
import xml.etree.ElementTree as ET
from collections import Counter


def skip_reason(case):
    output = case.findtext("system-out") or ""
    # GoogleTest prints "file:line: Skipped" and the reason below it.
    found = re.search(r"^\S+:\d+: Skipped\n(.+)$", output, re.MULTILINE)
    if found:
        return found.group(1).strip()
    skipped = case.find("skipped")
    return (skipped.get("message") if skipped is not None else None) or "not run"


def main(path):
    cases = ET.parse(path).getroot().findall("testcase")
    failed = [case for case in cases if case.get("status") == "fail"]
    skipped = [case for case in cases if case.get("status") in ("notrun", "disabled")]
    for case in failed:
        print(f"FAILED {case.get('name')}")
        print((case.findtext("system-out") or "").strip()[-4000:])
    for reason, count in sorted(Counter(skip_reason(case) for case in skipped).items()):
        print(f"{count} skipped: {reason}")
    print(len(cases) - len(failed) - len(skipped), len(failed), len(skipped))


main(sys.argv[1])
