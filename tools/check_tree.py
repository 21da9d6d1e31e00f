"""Finds what must not be committed: paths of one machine, download addresses, merge markers.

    python tools/check_tree.py

Reads every text file that git tracks or would track. Prints file:line for each finding and exits 1.
The patterns are written so that they do not match their own text.
"""

import re
import subprocess
import sys
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

ROOT = Path(__file__).resolve().parents[1]
# Folders that every system has: naming one of them says nothing about this machine.
COMMON_FOLDERS = {
    "/" + name
    for name in ("", "tmp", "var/tmp", "usr", "usr/local", "opt", "srv", "mnt", "home", "Users")
}
NOT_IN_A_LONGER_PATH = r"(?<![\w.-])"


@dataclass(frozen=True)
class Rule:
    """A pattern that no line may match, and what a match means."""

    meaning: str
    pattern: re.Pattern[str]
    only_names: re.Pattern[str] = re.compile("")


ADDRESS = r"\s*[=\s]\s*[\"']?(?:\w+:/|\.{0,2}/|[~$%])"
REQUIREMENT_FILES = re.compile(r"(^|/)(requirements|constraints)[^/]*$|\.lock$")
RULES = (
    Rule("path of a home folder", re.compile(NOT_IN_A_LONGER_PATH + r"/home/[a-z_][\w.-]*/")),
    Rule("path of a home folder", re.compile(NOT_IN_A_LONGER_PATH + r"/Users/[\w.-]+/")),
    Rule("path of a home folder", re.compile(r"\b[A-Za-z]:\\+Users\\")),
    Rule(
        "address of a package index", re.compile(r"(?:--(?:extra-)?index-url|_INDEX_URL)" + ADDRESS)
    ),
    Rule("place of packages", re.compile(r"(?:--find-links|_FIND_LINKS)" + ADDRESS)),
    Rule("place of packages", re.compile(r"^\s*-[if][=\s]"), REQUIREMENT_FILES),
    Rule("download address", re.compile(r"https?://\S*/(?:packages/|simple(?:[/\"'\s]|$))")),
    Rule("package index", re.compile(r"\bpypi\.org|files\.pythonhosted\.org")),
    Rule("download address", re.compile(r"raw\.githubusercontent")),
    Rule("merge marker", re.compile(r"^(?:<{7}|>{7}|\|{7})(?: |$)")),
)


@dataclass(frozen=True)
class Finding:
    name: str
    line: int
    meaning: str
    text: str

    def __str__(self) -> str:
        return f"{self.name}:{self.line}: {self.meaning}: {self.text.strip()[:120]}"


def rules_of_this_machine(root: Path, home: Path) -> list[Rule]:
    """Rules against the folder the checkout lies in and the user's home folder."""
    places = {
        "path of this checkout's place": root.parent,
        "path of this user's home folder": home,
    }
    return [
        Rule(meaning, re.compile(NOT_IN_A_LONGER_PATH + re.escape(str(place)) + "/"))
        for meaning, place in places.items()
        if str(place) not in COMMON_FOLDERS
    ]


def names_in_tree(root: Path) -> list[str]:
    """Files that git tracks or would track; a tracked file that was deleted is left out."""
    listed = subprocess.run(
        ["git", "ls-files", "-z", "--cached", "--others", "--exclude-standard"],
        cwd=root,
        capture_output=True,
        check=True,
    )
    names = {name.decode("utf-8", "surrogateescape") for name in listed.stdout.split(b"\0") if name}
    return sorted(name for name in names if (root / name).is_file())


def text_of(path: Path) -> str | None:
    """The file's text; None for a file that is not text."""
    content = path.read_bytes()
    return None if b"\0" in content else content.decode("utf-8", "replace")


def findings_in(name: str, text: str, rules: list[Rule]) -> Iterator[Finding]:
    wanted = [rule for rule in rules if rule.only_names.search(name)]
    for number, line in enumerate(text.splitlines(), start=1):
        for rule in wanted:
            if rule.pattern.search(line):
                yield Finding(name, number, rule.meaning, line)


def check_tree(root: Path, home: Path) -> list[Finding]:
    """Everything in the tree that must not be committed."""
    rules = [*RULES, *rules_of_this_machine(root, home)]
    findings: list[Finding] = []
    for name in names_in_tree(root):
        text = text_of(root / name)
        if text is not None:
            findings.extend(findings_in(name, text, rules))
    return findings


def main() -> int:
    try:
        findings = check_tree(ROOT, Path.home())
    except (FileNotFoundError, subprocess.CalledProcessError) as error:
        said = getattr(error, "stderr", None) or b""
        print(f"git could not list the files of {ROOT}: {error} {said.decode(errors='replace')}")
        return 2
    for finding in findings:
        print(finding)
    return 1 if findings else 0


if __name__ == "__main__":
    sys.exit(main())
