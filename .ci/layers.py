"""Which part of the source may use which: fails on every line that breaks the layering.

Tests inside the source are left out, and so are comments.
"""

import pathlib
import re
import sys

ROOT = pathlib.Path(__file__).resolve().parent.parent
UPPER = {"noise", "source", "pipeline", "record", "cli", "write", "simulate"}
PLAIN = {"units", "measurement", "constants"}
MAY_TOUCH_FILES = ("src/cli/", "src/map/read.rs", "src/map/description.rs",
                   "src/map/manifest.rs", "src/write/mod.rs")
TEST_MODULE = re.compile(r"^#\[cfg\(test\)\]\n(?:#\[.*\]\n)*mod ", re.MULTILINE)


def code(path):
    """(line number, text) of the lines that are neither test nor comment."""
    if path.stem == "tests" or path.stem.endswith("_tests"):
        return
    text = path.read_text(encoding="utf-8")
    tests = TEST_MODULE.search(text)
    if tests:
        text = text[: tests.start()]
    for number, line in enumerate(text.splitlines(), 1):
        if not line.lstrip().startswith("//"):
            yield number, line


def used(line):
    """The parts of the crate named on a line, `use crate::{a, b::c}` included."""
    names = set(re.findall(r"\bcrate::(\w+)", line))
    for group in re.findall(r"\bcrate::\{(.*)", line):
        names |= set(re.findall(r"(?:^|[,{])\s*(\w+)", group))
    return names


def complaint(name, line):
    """What is wrong with a line of the file `name`, if anything."""
    parts = used(line)

    def only(allowed):
        extra = parts - allowed
        return f"uses {', '.join(sorted(extra))}" if extra else None

    def none_of(refused):
        return only(parts - refused)

    if re.search(r"\be?print(ln)?!", line):
        return "prints: only cli/messages.rs and write/ do, through a writer"
    if "std::fs" in line and not name.startswith(MAY_TOUCH_FILES):
        return "touches files"
    if not name.startswith("src/cli") and "cli" in parts:
        return "uses cli"
    if name.startswith("src/physics/beaming") or name == "src/stats.rs":
        if re.search(r"\bsuper::", line):
            return "uses what lies above it"
        return only(PLAIN)
    if name.startswith("src/physics"):
        return none_of({"map"} | UPPER)
    if name.startswith("src/simulate"):
        return none_of({"pipeline", "record", "assemble", "write"})
    if name.startswith("src/write"):
        return only({"record", "quantity", "measurement", "flags", "write"})
    if name.startswith("src/map"):
        return none_of(UPPER)
    return None


def main():
    broken = 0
    for path in sorted(ROOT.glob("src/**/*.rs")):
        name = path.relative_to(ROOT).as_posix()
        for number, line in code(path):
            what = complaint(name, line)
            if what:
                broken += 1
                print(f"{name}:{number}: {what}: {line.strip()}", file=sys.stderr)
    return 1 if broken else 0


if __name__ == "__main__":
    sys.exit(main())
