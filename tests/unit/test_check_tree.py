"""The tree check finds what was planted, at its line, and nothing in what is allowed."""

import subprocess
from pathlib import Path

import pytest

from tools.check_tree import RULES, Finding, check_tree, findings_in, rules_of_this_machine

ROOT = Path(__file__).parents[2]


@pytest.fixture
def checkout(tmp_path, monkeypatch):
    """An empty git repository in a folder with a space in its path."""
    for name in ("GIT_DIR", "GIT_WORK_TREE", "GIT_INDEX_FILE"):  # set while a git hook runs
        monkeypatch.delenv(name, raising=False)
    folder = tmp_path / "some place" / "project"
    folder.mkdir(parents=True)
    subprocess.run(["git", "init", "--quiet"], cwd=folder, check=True)
    return folder


@pytest.fixture
def home(tmp_path):
    return tmp_path / "people" / "somebody"


# In pieces, so that this file stays clean under its own check.
HOST = "https://host.example"
PLANTED = {
    "path of a home folder": [
        "see /ho" + "me/anna/work.txt",
        'open("/Us' + 'ers/Anna/x")',
        "C:" + "\\Users\\anna",
        "'D:" + "\\\\Users\\\\anna'",
    ],
    "address of a package index": [
        "pip install --index" + f"-url {HOST}/mirror",
        "pip install --extra-index" + "-url=file:///packages",
        "PIP_INDEX" + f"_URL={HOST}/mirror",
    ],
    "place of packages": [
        "pip install --find" + "-links /wheels",
        "pip install --find" + "-links=./wheels",
    ],
    "download address": [
        f"{HOST}/sim" + "ple/django/",
        f'"{HOST}/mirror/sim' + 'ple"',
        f"{HOST}/pack" + "ages/ab/cd/x.whl",
        "raw.github" + "usercontent.com/a/b",
    ],
    "package index": ["from py" + "pi.org today", "files.python" + "hosted.org"],
    "merge marker": ["<" * 7 + " HEAD", ">" * 7 + " theirs", "|" * 7 + " base"],
}
ALLOWED = [
    "--index-url and --find-links are not wanted here",
    "--no-emit-index-url --no-emit-find-links",
    "a path such as /home/<name>/ or ~/notes",
    "/api/v1/home/anna/",
    "https://doi.org/10.1021/packages",
    "https://example.org/simple-words/",
    "=======",
    "<<<<<<<<<<<< a rule of signs",
    "PyPI",
]


@pytest.mark.parametrize(
    ("meaning", "line"), [(meaning, line) for meaning, lines in PLANTED.items() for line in lines]
)
def test_planted_line_is_found_at_its_place(checkout, home, meaning, line):
    (checkout / "docs").mkdir()
    (checkout / "docs" / "notes.md").write_text(f"first\n{line}\nlast\n")
    assert check_tree(checkout, home) == [Finding("docs/notes.md", 2, meaning, line)]


@pytest.mark.parametrize("line", ALLOWED)
def test_allowed_line_passes(checkout, home, line):
    (checkout / "notes.md").write_text(f"{line}\n")
    assert check_tree(checkout, home) == []


def test_option_lines_are_found_in_requirement_files_only(checkout, home):
    for name in ("requirements-dev.lock", "notes.md"):
        (checkout / name).write_text("-f somewhere\n")
    assert [str(found) for found in check_tree(checkout, home)] == [
        "requirements-dev.lock:1: place of packages: -f somewhere"
    ]


def test_places_of_this_machine_are_found(checkout, home):
    lines = [f"data in {checkout.parent}/other", f"{home}/.ssh", f"{home}like this", "/people/x"]
    (checkout / "notes.md").write_text("\n".join(lines))
    assert [(found.line, found.meaning) for found in check_tree(checkout, home)] == [
        (1, "path of this checkout's place"),
        (2, "path of this user's home folder"),
    ]


def test_a_checkout_in_a_folder_every_system_has_makes_no_rule_of_it():
    assert rules_of_this_machine(Path("/tmp/project"), Path("/")) == []


def test_tracked_and_new_files_are_read_but_not_ignored_binary_or_deleted_ones(checkout, home):
    bad = PLANTED["package index"][0] + "\n"
    for name in ("tracked.txt", "new.txt", "ignored.txt", "deleted.txt"):
        (checkout / name).write_text(bad)
    (checkout / ".gitignore").write_text("ignored.txt\n")
    (checkout / "picture.png").write_bytes(b"\0" + bad.encode())
    subprocess.run(["git", "add", "tracked.txt", "deleted.txt"], cwd=checkout, check=True)
    (checkout / "deleted.txt").unlink()
    assert [found.name for found in check_tree(checkout, home)] == ["new.txt", "tracked.txt"]


def test_the_check_and_its_test_are_clean_on_their_own_text():
    for name in ("tools/check_tree.py", "tests/unit/test_check_tree.py"):
        text = (ROOT / name).read_text(encoding="utf-8")
        assert list(findings_in(name, text, list(RULES))) == []
